"""The witness of two records: as a document, as text, and as files. Only `examine` imports what is heavy."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import duckdb
import numpy as np

from .. import __version__
from ..errors import UsageError
from ..grouping.reasons import REASONS
from ..settings import Settings
from ..store.stages import stored_settings
from .cif import cif_text
from .overlay import drawn
from .pair_outright import Apart, outright
from .pair_sides import Side, side_of
from .tables import safe, table_text

if TYPE_CHECKING:
    from .pair_match import PairMatch

CAUTION = "A grade is a geometric statement, not a magnetic or electronic one; structures are as good as their source."

EQUATIONS = (
    "Cells and positions are rows, lengths in angstrom, sites and cosets are counted from 0.",
    "Way back: given.cell = K L R with K = way_back.matrix, L = reduced.cell, R = way_back.rotation. For given site g: "
    "given.position[g] K = reduced.position[site_map[g]] + site_shift[g] + origin, up to residual_angstrom.",
    "Common cell: P L_A for A and Q L_B for B. With the Hermite form of P (diagonal a, b, c) site i in coset j has the "
    "number i |det P| + j and lies at u = (position[i] + n) P^-1, n = (j div bc, (j div c) mod b, j mod c); for B "
    "likewise v with Q.",
    "Strain: P L_A F = Q L_B; the singular values of F are the stretches; strain is the largest |ln|, shape_strain the "
    "same less the mean of the three logarithms; with F = U S V^T the orthogonal part is U V^T.",
    "Shift: delta[k] = v[pairing[k]] - u[k] - shift_fractional, less the nearest integers; the delta add up to zero; "
    "largest and rms shift are of sqrt(delta G delta^T), G = (P L_A (P L_A)^T + Q L_B (Q L_B)^T) / 2.",
    "In a.cif and b.cif both structures stand in the common cell with A's orientation and origin; site k of the one is "
    "paired with site k of the other. b.cif has the cell Q L_B O^T and the positions u + delta.",
    "Layers: the third row is no period. The given structure is put upright first: its cell gets the rows a and b and "
    "1024 angstrom along their normal, on the side of c, and the third number of site_shift says how many given rows c "
    "are taken off each site before; in the sum above it counts as 0. Strain and shape_strain are of the two stretches "
    "in the plane, volume_ratio is that of the areas. The files have a third row 6 angstrom longer than the layer is "
    "thick.",
)
"""How a referee computes the numbers again."""

LIMITS = ("same_shift", "same_strain", "near_shift", "near_strain", "window_factor")


@dataclass(frozen=True, slots=True)
class Examined:
    """Two records and what came of comparing them: exactly one of `match` and `apart`."""

    a: Side
    b: Side
    settings: Settings
    match: PairMatch | None
    apart: Apart | None

    standing: tuple[tuple[str, bool, bool], ...]
    """By grade that both are grouped at: whether they stand in one family, and in one group."""

    def as_json(self) -> dict[str, Any]:
        """Everything, ready for json.dumps."""
        limits: dict[str, Any] = {name: getattr(self.settings, name) for name in LIMITS}
        return {
            "version": __version__,
            "a": self.a.as_json(),
            "b": self.b.as_json(),
            "settings": limits | {"mirror_images": self.settings.mirror_images},
            "match": self.match.as_json() if self.match is not None else None,
            "standing": [{"grade": g, "one_family": f, "one_group": o} for g, f, o in self.standing],
            "apart": _finite(self.apart.as_json()) if self.apart is not None else None,
            "equations": list(EQUATIONS),
            "caution": CAUTION,
        }


def _finite(value: dict[str, Any]) -> dict[str, Any]:
    return {k: None if isinstance(v, float) and not np.isfinite(v) else v for k, v in value.items()}


def examine(
    connection: duckdb.DuckDBPyConnection, first: str, second: str, before: Callable[[], None] | None = None
) -> Examined:
    """Compare two records, by id, under the settings of the store. Read-only.

    `before` is called once when kernels are about to be loaded. Raises UsageError for one record given twice.
    """
    if first == second:
        raise UsageError(f"Both name the record {first}. Give two records.")
    a, b = side_of(connection, first), side_of(connection, second)
    settings = Settings.model_validate(stored_settings(connection))
    standing = _standing(connection, first, second)
    without = outright(a, b)
    if without is not None:
        return Examined(a, b, settings, None, without, standing)
    if before is not None:
        before()
    from ..grouping.window import near_window
    from .pair_apart import what_keeps_apart
    from .pair_match import match_of

    t = settings.tolerances
    match = match_of(a, b, near_window(t), settings.mirror_images, t.near_strain)
    apart = what_keeps_apart(a, b, t, settings.mirror_images) if match is None else None
    return Examined(a, b, settings, match, apart, standing)


def _standing(connection: duckdb.DuckDBPyConnection, first: str, second: str) -> tuple[tuple[str, bool, bool], ...]:
    rows = connection.execute(
        "SELECT a.grade, a.family_id = b.family_id, a.group_id = b.group_id FROM members a "
        "JOIN members b USING (grade) "
        "WHERE a.record_id = ? AND b.record_id = ? "
        "ORDER BY list_position(['copy', 'key', 'same', 'near', 'rescaled', 'isotypic'], grade)",
        [first, second],
    ).fetchall()
    return tuple((str(grade), bool(family), bool(group)) for grade, family, group in rows)


def witness_text(found: Examined, rows: int) -> str:
    """For a person: the two records, the verdict with its numbers, and the paired sites, largest distance first."""
    lines = [_side_line("A", found.a), _side_line("B", found.b), ""]
    if found.match is not None:
        lines += _match_lines(found, found.match, rows)
    elif found.apart is not None:
        lines += _apart_lines(found, found.apart, rows)
    return "\n".join([*lines, "", _standing_line(found), CAUTION])


def _standing_line(found: Examined) -> str:
    """How the store has grouped the two; a family of several groups is a chain, whose ends do not match."""
    if not found.standing:
        return "In the store they are not both grouped: missing, withdrawn, or waiting for `group`."
    words = {(True, True): "one group", (True, False): "one family, two groups"}
    return "In the store: " + ", ".join(
        f"{grade} {words.get((family, group), 'two families')}" for grade, family, group in found.standing
    )


def _side_line(name: str, side: Side) -> str:
    kind = "" if side.periodicity == 3 else ", layer"
    given = f"{len(side.given_tokens)} site{'' if len(side.given_tokens) == 1 else 's'} given"
    return (
        f"{name}  {safe(side.name)}  {side.record_id}  {side.formula}, {given}, "
        f"{len(side.tokens)} primitive{kind}, {side.size_told}/site, file {safe(side.file)}"
    )


def _match_lines(found: Examined, match: PairMatch, rows: int) -> list[str]:
    if match.grade is None:
        head = "They match as mirror images alone, which this store keeps apart (mirror_images = separate)."
    elif match.grade == "window":
        head = "They match just outside near, in the window: no match at grade near, and a pair to look at."
    else:
        head = f"They are one crystal at grade {match.grade}."
    why = f"Reason: {match.reason} ({REASONS[match.reason]})."
    return [head, why, *_measures(found, match), "", *_sites(found, match, rows)]


def _apart_lines(found: Examined, apart: Apart, rows: int) -> list[str]:
    lines = ["They do not match.", f"What keeps them apart: {apart.cause}: {apart.message}."]
    if apart.closest is not None:
        lines += ["", "The closest match in a wider window, which makes them no group:"]
        lines += [*_measures(found, apart.closest), "", *_sites(found, apart.closest, rows)]
    elif apart.searched_shift is not None:
        lines.append(
            f"No match was found up to a shift of {apart.searched_shift:g} Å and a strain of {apart.searched_strain:g} "
            "either."
        )
    return lines


def _measures(found: Examined, match: PairMatch) -> list[str]:
    s = found.settings
    limits = f"same {s.same_shift:g}, near {s.near_shift:g}, window {s.near_shift * s.window_factor:g} Å"
    strains = f"same {s.same_strain:g}, near {s.near_strain:g}, window {s.near_strain * s.window_factor:g}"
    larger = f", {match.larger.upper()} the larger" if match.larger else ""
    size = "volume" if found.a.periodicity == 3 else "area"
    hand = "yes: only the mirror image of the one matches" if match.mirrored else "no"
    if match.improper and not match.mirrored:
        hand = "no (this match is one, and one without mirror image keeps the same limits)"
    return [
        f"largest shift    {match.largest_shift:.6f} Å ({limits})",
        f"rms shift        {match.rms_shift:.6f} Å",
        f"strain           {match.strain:.6f} ({strains})",
        f"shape strain     {match.shape_strain:.6f}",
        f"{size} ratio".ljust(17) + f"{match.volume_ratio:.6f} per site{larger}",
        f"stretches        {_numbers(match.stretches, '.6f')}",
        f"mirror image     {hand}",
        f"P                {_matrix(match.p_matrix, 'd')}  |det| {_index(match.p_matrix)}, on the reduced cell of A",
        f"Q                {_matrix(match.q_matrix, 'd')}  |det| {_index(match.q_matrix)}, on the reduced cell of B",
        f"orthogonal part  {_matrix(match.orthogonal, '.6f')}  from the frame of A to that of B",
        f"origin shift     {_origin_shift(found, match)}",
    ]


def _origin_shift(found: Examined, match: PairMatch) -> str:
    if found.a.periodicity == 3:
        return f"{_numbers(match.shift, '.6f')} of the common cell"
    height = _height(float(match.shift[2]), match)
    return f"{_numbers(match.shift[:2], '.6f')} of the common cell, {_numbers([height], '.6f')} Å along the normal"


def _height(z: float, match: PairMatch) -> float:
    """Angstrom along the normal of a layer for a fraction of its third row."""
    return (z - round(z)) * float(np.linalg.norm(match.first_cell[2]))


def _numbers(values: Any, form: str) -> str:
    shown = [format(v, form) for v in np.asarray(values).tolist()]
    return " ".join(s.removeprefix("-") if not s.strip("-0.") else s for s in shown)  # no negative zero


def _matrix(rows: Any, form: str) -> str:
    return " / ".join(_numbers(row, form) for row in rows)


def _index(matrix: Any) -> int:
    return abs(round(float(np.linalg.det(matrix))))


def _sites(found: Examined, match: PairMatch, rows: int) -> list[str]:
    """The table of paired sites."""
    count = len(match.distances)
    layer = found.a.periodicity == 2
    order = np.lexsort((np.arange(count), -np.round(match.distances, 9)))[:rows]
    listed = []
    for k in order.tolist():
        m = int(match.pairing[k])
        i, j = int(match.first_of[k]), int(match.second_of[m])
        x, y, z = (np.round(match.first_sites[k], 5) % 1.0).tolist()
        given = (", ".join(map(str, side.given_sites(site))) for side, site in ((found.a, i), (found.b, j)))
        place = [f"{v:.5f}" for v in (x, y, z)]
        if layer:
            place[2] = _numbers([_height(float(match.first_sites[k, 2]), match)], ".4f")
        listed.append((k + 1, found.a.tokens[i], next(given), *place, m + 1, next(given), f"{match.distances[k]:.6f}"))
    z = "height (Å)" if layer else "z"
    headings = ("site of A", "species", "as given", "x", "y", z, "site of B", "as given", "distance (Å)")
    said = f"Paired sites of the common cell, {count:,} of each, the farthest first"
    if len(order) < count:
        said += f" ({len(order):,} shown)"
    return [said + ":", table_text(headings, listed)]


def check_folder(folder: Path) -> None:
    """Raise UsageError where the folder cannot be made anew."""
    if folder.exists():
        raise UsageError(f"{folder} exists already. Give a new folder.")
    if not folder.parent.is_dir():
        raise UsageError(f"There is no folder {folder.parent}.")


def write_witness(found: Examined, folder: Path) -> None:
    """Write a.cif, b.cif and witness.json into a new folder, which is there whole or not at all."""
    check_folder(folder)
    unfinished = folder.with_name(f".{folder.name}.{os.getpid()}.new")
    try:
        unfinished.mkdir()
        first, second = cif_texts(found)
        (unfinished / "a.cif").write_text(first, encoding="utf-8")
        (unfinished / "b.cif").write_text(second, encoding="utf-8")
        text = json.dumps(found.as_json(), indent=1, ensure_ascii=False)
        (unfinished / "witness.json").write_text(text + "\n", encoding="utf-8")
        unfinished.rename(folder)
    finally:
        shutil.rmtree(unfinished, ignore_errors=True)


def cif_texts(found: Examined) -> tuple[str, str]:
    """Both structures as CIF: in one common cell and orientation where there is a match, however far."""
    a, b = found.a, found.b
    match = found.match or (found.apart.closest if found.apart is not None else None)
    if match is None:
        note = "reduced primitive cell, in a frame of its own: there is no match with the other"
        alone = [drawn(s.cell, s.positions, np.zeros_like(s.positions), s.periodicity)[:2] for s in (a, b)]
        return (
            cif_text(*alone[0], a.tokens, a.name, _tags(a, b, note)),
            cif_text(*alone[1], b.tokens, b.name, _tags(b, a, note)),
        )
    species_a = [a.tokens[i] for i in match.first_of.tolist()]
    species_b = [b.tokens[i] for i in match.second_of[match.pairing].tolist()]
    far = "" if found.match is not None else " (a match beyond the limits of the store)"
    note = f"common cell P A; site k is paired with site k of the other file{far}"
    image = "mirror image of this record, " if match.improper else ""
    back = (
        f"{image}mapped through the witness into the frame of the other file; site k is paired with site k there{far}"
    )
    first, sites, delta = drawn(match.first_cell, match.first_sites, match.delta, a.periodicity)
    second = match.second_cell @ match.orthogonal.T
    second[2] *= np.linalg.norm(first[2]) / np.linalg.norm(match.first_cell[2])  # by 1 where it is no layer
    return (
        cif_text(first, sites, species_a, a.name, _tags(a, b, note)),
        cif_text(second, sites + delta, species_b, b.name, _tags(b, a, back)),
    )


def _tags(side: Side, other: Side, note: str) -> dict[str, object]:
    layer = {"_lattice_census_periodic_directions": 2} if side.periodicity == 2 else {}
    return {
        **layer,
        "_lattice_census_record_id": side.record_id,
        "_lattice_census_source": side.source,
        "_lattice_census_label": side.label,
        "_lattice_census_other_record_id": other.record_id,
        "_lattice_census_note": note,
    }
