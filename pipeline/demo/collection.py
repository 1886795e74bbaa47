"""The demo collection on disk: eight sources in all formats, about 600 records, and the manifest of what they are.

Text files, archives and compressed files are the same bytes on every machine; the Parquet file, for one version of its
library, since that writes its own name into it.
"""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Callable, Sequence
from pathlib import Path

from .broken import (
    BROKEN_FRAMES,
    BROKEN_POSCARS,
    NOT_GZIP,
    SHORT_ROW,
    TORN_LINE,
    broken_cifs,
    broken_entries,
    broken_rows,
)
from .manifest import DemoRecord, Manifest
from .packing import stored_gzip, stored_tar, stored_zip
from .plan import ATTIC, CARDS, COARSE, EXCHANGE, FINE, FURNACE, GUESSES, PRESS, Plan, Planned, make_plan
from .texts import (
    OPTIMADE_HEADER,
    cell_lines,
    cif,
    cif_of_sites,
    optimade_attributes,
    optimade_entry,
    poscar,
    xyz_frame,
)

EV_PER_HARTREE = 27.211386245988

SETTINGS = f"""# Settings of the demo. A section [sources.NAME] says where a source keeps what.

[sources."{COARSE}"]
energy_column = "total_energy"
energy_unit = "eV"
theory = "level-one"
split_column = "set"
date_column = "finished_on"

[sources."{FINE}"]
energy_column = "energy_hartree"
energy_unit = "Ha"
theory = "level-two"
split_column = "set"
date_column = "finished_on"

[sources."{GUESSES}"]
structure_column = "geometry"
energy_column = "energy_per_site"
energy_unit = "eV/site"
theory_column = "level"
split_column = "part"
date_column = "made"

[sources."{FURNACE}"]
energy_column = "energy"
energy_unit = "eV"
theory = "level-one"
date_column = "day"

[sources."{EXCHANGE}"]
energy_column = "_orrowen_energy"
energy_unit = "eV"
theory = "level-two"
date_column = "last_modified"
"""

Item = Planned | tuple[str, str | None, str]
"""A record to accept, or (label, text, reason) of one to be refused."""

Noted = list[tuple[Item, str, int, str]]
"""(record, file, position, label), in order."""


def sources_of(folder: Path) -> tuple[Path, ...]:
    """The paths to ingest, one a source."""
    return tuple(folder / name for name in (CARDS, COARSE, FINE, GUESSES, FURNACE, EXCHANGE, PRESS, ATTIC))


def make_collection(folder: Path) -> Manifest:
    """Write the collection into an existing, empty folder and return its manifest. The same every time."""
    plan = make_plan()
    writers: tuple[tuple[str, Callable[[Path, list[Planned], Plan], Noted]], ...] = (
        (CARDS, _cards), (COARSE, _coarse), (FINE, _fine), (GUESSES, _guesses), (FURNACE, _furnace),
        (EXCHANGE, _exchange), (PRESS, _press), (ATTIC, _attic),
    )  # fmt: skip
    noted = [
        (name, *entry)
        for name, write in writers
        for entry in write(folder / name, [p for p in plan.records if p.source == name], plan)
    ]
    names = {id(item): f"{source}:{label}" for source, item, _, _, label in noted}
    records = tuple(_record(source, item, file, at, label, names) for source, item, file, at, label in noted)
    return Manifest(
        records,
        plan.mirror_images,
        plan.near_misses,
        tuple(names[id(p)] for p in plan.conflicts),
        tuple(names[id(p)] for p in plan.totals),
        tuple(names[id(p)] for p in plan.leaks),
    )


def _record(source: str, item: Item, file: str, position: int, label: str, names: dict[int, str]) -> DemoRecord:
    if not isinstance(item, Planned):
        return DemoRecord(source, file, position, label, None, ("broken",), None, None, None, None, item[2])
    return DemoRecord(
        source, file, position, label, item.crystal, item.done, item.reason, item.grade,
        names[id(item.same_as)] if item.same_as is not None else None, item.crystal if item.exact else None, None,
        round(item.energy, 9) if item.energy is not None else None, item.theory, item.split, item.date,
    )  # fmt: skip


def _spread(records: Sequence[Planned], broken: Sequence[tuple[str, str | None, str]]) -> list[Item]:
    """The broken ones at even distances among the others."""
    out: list[Item] = list(records)
    for i, item in enumerate(broken):
        out.insert((i + 1) * len(out) // (len(broken) + 1), item)
    return out


def _text(p: Planned, block: str) -> str:
    """A CIF: of the asymmetric unit with its operations where the record has one, else of all sites."""
    if p.base is not None:
        return cif_of_sites(cell_lines(p.base.conventional[0]), p.base.unit, block, p.base.operations)
    return cif(p.structure, block, p.digits)


def _write(path: Path, data: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(data)


def _cards(folder: Path, records: list[Planned], plan: Plan) -> Noted:
    """CIFs in two folders: cards of one block, some of them compressed, and sheets of six blocks."""
    torn, *others = broken_cifs()
    items: list[Item] = [torn, *_spread(records, others)]  # alone on the first card: torn text spoils what follows it
    noted: Noted = []
    number = 0
    while number < len(items):
        several = number % 16 == 10
        taken = items[number : number + (6 if several else 1)]
        stem = f"sheet-{number // 16 + 1}" if several else f"card-{number + 1:03d}"
        packed = not several and number % 5 == 0
        name = f"{'north' if number % 2 else 'south'}/{stem}.cif" + (".gz" if packed else "")
        texts = []
        for i, item in enumerate(taken):
            block = f"no{number + i + 1}" if isinstance(item, Planned) else item[0]
            texts.append(_text(item, block) if isinstance(item, Planned) else str(item[1]))
            noted.append((item, name, i, f"{stem}/{block}" if len(taken) > 1 else stem))
        data = "\n".join(texts).encode()
        _write(folder / name, stored_gzip(data) if packed else data)
        number += len(taken)
    _write(folder / "south/spoilt.cif.gz", NOT_GZIP)
    noted.append((("spoilt", None, "file_unreadable"), "south/spoilt.cif.gz", 0, "spoilt"))
    return noted


def _labels(prefix: str, items: Sequence[Item]) -> list[str]:
    return [f"{prefix}{i + 1:04d}" if isinstance(item, Planned) else item[0] for i, item in enumerate(items)]


def _cell_energy(p: Planned) -> float:
    """eV of the given cell."""
    assert p.energy is not None
    return round(p.energy * len(p.structure[2]), 8)


def _coarse(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """A CSV table: CIF texts, energies of the cell in eV."""
    items = _spread(records, [*broken_rows(), (SHORT_ROW, "", "text_unreadable")])
    buffer = io.StringIO(newline="")
    table = csv.writer(buffer, lineterminator="\n")
    table.writerow(["id", "cif", "total_energy", "set", "finished_on", "crew"])
    labels = _labels("c-", items)
    for i, (item, label) in enumerate(zip(items, labels, strict=True)):
        crew = ("gannet", "plover", "petrel")[i % 3]
        if isinstance(item, Planned):
            table.writerow([label, _text(item, label), f"{_cell_energy(item):.8f}", item.split, item.date, crew])
        elif label == SHORT_ROW:
            table.writerow([label, "data_short"])
        else:
            table.writerow([label, item[1] or "", "", "train", "", crew])
    _write(path, buffer.getvalue().encode())
    return [(item, path.name, i, label) for i, (item, label) in enumerate(zip(items, labels, strict=True))]


def _fine(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """A Parquet table: energies of the cell in Hartree."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    items = _spread(records, broken_rows()[:2])
    labels = _labels("f-", items)
    columns: dict[str, list[object]] = {
        "material_id": list(labels), "structure": [], "energy_hartree": [], "set": [], "finished_on": []
    }  # fmt: skip
    for item, label in zip(items, labels, strict=True):
        row: tuple[object, ...]
        if isinstance(item, Planned):
            row = (_text(item, label), round(_cell_energy(item) / EV_PER_HARTREE, 10), item.split, item.date)
        else:
            row = (item[1], None, None, None)
        for column, value in zip(("structure", "energy_hartree", "set", "finished_on"), row, strict=True):
            columns[column].append(value)
    table = pa.table({name: pa.array(v, pa.float64() if name == "energy_hartree" else pa.string())
                      for name, v in columns.items()})  # fmt: skip
    pq.write_table(table, path, compression="none", write_statistics=False)
    return [(item, path.name, i, label) for i, (item, label) in enumerate(zip(items, labels, strict=True))]


def _guesses(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """JSON lines: energies per site, but for one of a whole cell; labels that are not ASCII."""
    items = _spread(records, [broken_rows()[2], ("torn", TORN_LINE, "text_unreadable")])
    lines: list[str] = []
    noted: Noted = []
    for i, item in enumerate(items):
        label = f"Mutmaßung {i + 1}" if isinstance(item, Planned) else item[0]
        if isinstance(item, Planned):
            energy = _cell_energy(item) if any(item is p for p in plan.totals) else round(item.energy or 0.0, 9)
            row = {"id": label, "geometry": _text(item, f"g{i + 1}"), "energy_per_site": energy, "level": item.theory,
                   "part": item.split, "made": item.date}  # fmt: skip
            lines.append(json.dumps(row, ensure_ascii=False))
        elif item[1] == TORN_LINE:
            label = f"row {i + 1}"
            lines.append(TORN_LINE)
        else:
            lines.append(json.dumps({"id": label, "geometry": item[1]}))
        noted.append((item, path.name, i, label))
    _write(path, ("\n".join(lines) + "\n").encode())
    return noted


def _furnace(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """Extended XYZ: labelled frames, then a trajectory whose frames have numbers only."""
    labelled = [p for p in records if not p.in_trajectory]
    items = [*_spread(labelled, BROKEN_FRAMES), *(p for p in records if p.in_trajectory)]
    frames: list[str] = []
    noted: Noted = []
    for i, item in enumerate(items):
        if isinstance(item, Planned):
            label = f"furnace/{i + 1}" if item.in_trajectory else f"melt {i + 1}"
            named = "" if item.in_trajectory else f'label="{label}" '
            frames.append(xyz_frame(item.structure, f"{named}energy={_cell_energy(item):.8f} day={item.date}"))
        else:
            label = item[0]
            frames.append(str(item[1]))
        noted.append((item, path.name, i, label))
    _write(path, "".join(frames).encode())
    return noted


def _exchange(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """OPTIMADE JSON lines, with a field of the provider's own for the energy of the cell in eV."""
    entries = broken_entries()
    items = _spread(records, entries)
    labels = _labels("orrowen-", items)
    lines = [OPTIMADE_HEADER]
    for item, label in zip(items, labels, strict=True):
        if isinstance(item, Planned):
            attributes = {
                **optimade_attributes(item.structure),
                "last_modified": f"{item.date}T00:00:00Z",
                "_orrowen_energy": _cell_energy(item),
            }
            lines.append(optimade_entry(label, attributes))
        else:
            lines.append(str(item[1]))
    _write(path, ("\n".join(lines) + "\n").encode())
    return [(item, path.name, i, label) for i, (item, label) in enumerate(zip(items, labels, strict=True))]


def _poscar(p: Planned, number: int) -> bytes:
    return poscar(p.structure, f"pressed {number}", number % 4).encode()


def _press(folder: Path, records: list[Planned], plan: Plan) -> Noted:
    """POSCAR-style files, and older ones in a tar archive."""
    items = _spread(records, BROKEN_POSCARS)
    noted: Noted = []
    older: list[tuple[str, bytes]] = []
    for i, item in enumerate(items):
        number = i + 1
        stem = f"pellet-{number:02d}" if isinstance(item, Planned) else item[0]
        data = _poscar(item, number) if isinstance(item, Planned) else str(item[1]).encode()
        if isinstance(item, Planned) and number % 3 == 0:
            older.append((f"run/{stem}.poscar", data))
            noted.append((item, f"older.tar.gz/run/{stem}.poscar", 0, stem))
        else:
            _write(folder / f"{stem}.poscar", data)
            noted.append((item, f"{stem}.poscar", 0, stem))
    _write(folder / "older.tar.gz", stored_gzip(stored_tar(older)))
    return noted


def _attic(path: Path, records: list[Planned], plan: Plan) -> Noted:
    """A zip archive of CIFs, with one member that would leave the archive."""
    members: list[tuple[str, bytes]] = []
    noted: Noted = []
    for i, p in enumerate(records):
        stem = f"box-{i + 1:02d}"
        members.append((f"attic/{stem}.cif", _text(p, stem).encode()))
        noted.append((p, f"{path.name}/attic/{stem}.cif", 0, stem))
    members.append(("../stray.cif", broken_cifs()[0][1].encode()))
    noted.append((("stray", None, "archive_unsafe"), f"{path.name}/../stray.cif", 0, "stray"))
    members.append(("attic/empty.cif", b""))
    noted.append((("empty", None, "text_unreadable"), f"{path.name}/attic/empty.cif", 0, "empty"))
    _write(path, stored_zip(members))
    return noted
