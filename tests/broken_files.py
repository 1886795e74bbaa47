"""Forty and more broken files over all formats, each with the refusals that it must give.

A case is (file name, content, reasons): what `open_records` and `parse` refuse, in order, and no crystal besides those
counted in `good`. Everything here is made up.
"""

from __future__ import annotations

import bz2
import gzip
import io
import json
import tarfile
import zipfile
from dataclasses import dataclass


@dataclass(frozen=True)
class Broken:
    file: str
    content: bytes
    reasons: tuple[str, ...]
    good: int = 0

    @property
    def id(self) -> str:
        return f"{self.file}-{'-'.join(self.reasons)}"


CELL = (
    "_cell_length_a 4\n_cell_length_b 5\n_cell_length_c 6\n_cell_angle_alpha 90\n_cell_angle_beta 90\n"
    "_cell_angle_gamma 90\n"
)
LOOP = (
    "loop_\n_atom_site_label\n_atom_site_type_symbol\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
    "_atom_site_occupancy\n"
)
GOOD_CIF = f"data_good\n{CELL}{LOOP}Si1 Si 0 0 0 1\n"
XYZ = 'Lattice="4 0 0 0 5 0 0 0 6" Properties=species:S:1:pos:R:3'
GOOD_FRAME = f"1\n{XYZ}\nSi 0 0 0\n"
POSCAR = "made up\n1.0\n4 0 0\n0 5 0\n0 0 6\nSi\n1\nDirect\n0 0 0\n"


def _cif(cell: str = CELL, loop: str = LOOP, rows: str = "Si1 Si 0 0 0 1\n", more: str = "") -> bytes:
    return f"data_x\n{cell}{more}{loop}{rows}".encode()


def _entry(**changes: object) -> bytes:
    attributes: dict[str, object] = {
        "lattice_vectors": [[4, 0, 0], [0, 5, 0], [0, 0, 6]],
        "cartesian_site_positions": [[0, 0, 0]],
        "species_at_sites": ["Si"],
        "species": [{"name": "Si", "chemical_symbols": ["Si"], "concentration": [1.0]}],
        "dimension_types": [1, 1, 1],
        "nsites": 1,
    }
    attributes.update(changes)
    attributes = {k: v for k, v in attributes.items() if v != "absent"}
    return json.dumps({"id": "e/1", "type": "structures", "attributes": attributes}).encode() + b"\n"


HEADER = b'{"x-optimade": {"api_version": "1.2.0"}}\n'
GOOD_ENTRY = _entry()


def _tar(members: list[tuple[str, bytes | tarfile.TarInfo]]) -> bytes:
    buffer = io.BytesIO()
    with tarfile.open(fileobj=buffer, mode="w") as archive:
        for name, content in members:
            if isinstance(content, tarfile.TarInfo):
                archive.addfile(content)
                continue
            info = tarfile.TarInfo(name)
            info.size = len(content)
            archive.addfile(info, io.BytesIO(content))
    return buffer.getvalue()


def _zip(members: list[tuple[str, bytes]]) -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members:
            archive.writestr(name, content)
    return buffer.getvalue()


def _link(name: str, target: str) -> tarfile.TarInfo:
    info = tarfile.TarInfo(name)
    info.type, info.linkname = tarfile.SYMTYPE, target
    return info


def _device(name: str) -> tarfile.TarInfo:
    info = tarfile.TarInfo(name)
    info.type = tarfile.CHRTYPE
    return info


def _csv(*rows: str) -> bytes:
    return ("id,cif\n" + "".join(rows)).encode()


def _quoted(text: str) -> str:
    return '"' + text.replace('"', '""') + '"'


GOOD_ROW = f"ok,{_quoted(GOOD_CIF)}\n"
LARGE = 10**11


def broken_cif() -> list[Broken]:
    def case(name: str, content: bytes, reason: str) -> Broken:
        return Broken(f"{name}.cif", content, (reason,))

    no_cell = "".join(line + "\n" for line in CELL.splitlines() if "length_b" not in line)
    return [
        case("empty", b"", "text_unreadable"),
        case("prose", b"This is not a structure.\n", "text_unreadable"),
        case("nul", _cif().replace(b"Si1", b"Si\x001"), "text_unreadable"),
        case("binary", bytes(range(256)) * 20, "text_unreadable"),
        case("cut_off", _cif()[:-8], "text_unreadable"),
        case("twice", _cif(more="_cell_length_a 4\n"), "text_unreadable"),
        case("no_length", _cif(no_cell), "cell_missing"),
        case("no_cell", _cif(""), "cell_missing"),
        case("unknown_length", _cif(CELL.replace("_b 5", "_b ?")), "cell_missing"),
        case("length_nan", _cif(CELL.replace("_b 5", "_b nan")), "cell_nonfinite"),
        case("length_word", _cif(CELL.replace("_b 5", "_b long")), "cell_nonfinite"),
        case("length_zero", _cif(CELL.replace("_b 5", "_b 0")), "cell_zero"),
        case("no_volume", _cif(CELL.replace("90", "120")), "cell_zero"),
        case("negative", _cif(CELL.replace("_b 5", "_b -5")), "cell_absurd"),
        case("huge", _cif(CELL.replace("_b 5", "_b 1e9")), "cell_absurd"),
        case("tiny", _cif(CELL.replace("_b 5", "_b 0.01")), "cell_absurd"),
        case("angles", _cif(CELL.replace("90", "150")), "cell_absurd"),
        case("angle", _cif(CELL.replace("gamma 90", "gamma 190")), "cell_absurd"),
        case("flat", _cif(CELL.replace("gamma 90", "gamma 0.0001")), "cell_absurd"),
        case("no_sites", _cif(loop="", rows=""), "sites_missing"),
        case("no_rows", _cif(rows=""), "sites_missing"),
        case("unknown_x", _cif(rows="Si1 Si ? 0 0 1\n"), "coordinates_missing"),
        case("no_z", _cif(loop=LOOP.replace("_atom_site_fract_z\n", ""), rows="Si1 Si 0 0 1\n"), "coordinates_missing"),
        case("x_nan", _cif(rows="Si1 Si nan 0 0 1\n"), "coordinates_nonfinite"),
        case("x_word", _cif(rows="Si1 Si x 0 0 1\n"), "coordinates_nonfinite"),
        case("x_far", _cif(rows="Si1 Si 1e300 0 0 1\n"), "coordinates_nonfinite"),
        case("x_underscore", _cif(rows="Si1 Si 0_1 0 0 1\n"), "coordinates_nonfinite"),
        case("species_x", _cif(rows="X1 X 0 0 0 1\n"), "species_unknown"),
        case("occupancy_0", _cif(rows="Si1 Si 0 0 0 0\n"), "occupancy_invalid"),
        case("occupancy_negative", _cif(rows="Si1 Si 0 0 0 -1\n"), "occupancy_invalid"),
        case("occupancy_2", _cif(rows="Si1 Si 0 0 0 2\n"), "occupancy_invalid"),
        case("occupancy_sum", _cif(rows="Si1 Si 0 0 0 0.6\nGe1 Ge 0 0 0 0.6\n"), "occupancy_invalid"),
        case("occupancy_word", _cif(rows="Si1 Si 0 0 0 half\n"), "occupancy_invalid"),
        case("many", _cif(rows="Si1 Si 0 0 0 1\n" * 1001), "sites_too_many"),
        case("group", _cif(more="_space_group_name_H-M_alt 'no group'\n"), "symmetry_unreadable"),
        case("operation", _cif(more="_space_group_symop_operation_xyz 'x,y'\n"), "symmetry_unreadable"),
        Broken("two.cif", f"{GOOD_CIF}data_bad\n{CELL}{GOOD_CIF}".encode(), ("sites_missing",), 2),
    ]


def broken_tables() -> list[Broken]:
    return [
        Broken("empty.csv", b"", ("file_unreadable",)),
        Broken("columns.csv", b"id,text\n1,x\n", ("file_unreadable",)),
        Broken("fields.csv", _csv(GOOD_ROW, "b,x,y,z\n", "c\n", GOOD_ROW), ("text_unreadable", "text_unreadable"), 2),
        Broken("no_text.csv", _csv(GOOD_ROW, "b,\n", GOOD_ROW), ("text_missing",), 2),
        Broken("prose.csv", _csv(GOOD_ROW, "b,nothing\n"), ("text_unreadable",), 1),
        Broken("open_quote.csv", _csv(GOOD_ROW, 'b,"data_x\n'), ("text_unreadable",), 1),
        Broken("stray.csv", _csv(GOOD_ROW, 'b,"x"y\n', GOOD_ROW), ("text_unreadable",), 2),
        Broken("nul.csv", _csv(GOOD_ROW) + b"b,\0\n", ("file_unreadable",), 1),
        Broken("utf16.csv", _csv(GOOD_ROW).decode().encode("utf-16"), ("file_unreadable",)),
        Broken("latin.csv", _csv(GOOD_ROW) + "M\xfcller,x\n".encode("latin-1"), ("file_unreadable",), 1),
        Broken("long.csv", _csv(GOOD_ROW, f"b,{'x' * 30_000_000}\n", GOOD_ROW), ("text_too_long",), 2),
        Broken("cut.csv.gz", gzip.compress(_csv(GOOD_ROW * 2000), 1)[:-9], ("file_unreadable",), 2000),
        Broken("no_gzip.csv.gz", b"id,cif\n", ("file_unreadable",)),
        Broken("empty.parquet", b"", ("file_unreadable",)),
        Broken("prose.parquet", b"PAR1 this is no table PAR1", ("file_unreadable",)),
        Broken(
            "lines.jsonl",
            b'{"id": 1, "cif": %s}\n{"id": 2,\n[1]\n{"id": 3, "cif": 5}\n{"id": 4}\n{"id": 5, "cif": %s}\n'
            % ((json.dumps(GOOD_CIF).encode(),) * 2),
            ("text_unreadable", "text_unreadable", "text_unreadable", "text_missing"),
            2,
        ),
        Broken("deep.jsonl", b'{"id": 1, "cif": ' + b"[" * 100_000 + b"\n", ("text_unreadable",)),
        Broken("columns.jsonl", b'{"id": 1, "text": "x"}\n', ("file_unreadable",)),
        Broken("latin.jsonl", b'{"id": "\xff"}\n', ("file_unreadable",)),
    ]


def broken_xyz() -> list[Broken]:
    def case(name: str, frame: str, *reasons: str) -> Broken:
        """The broken frame between two good ones."""
        return Broken(f"{name}.extxyz", (GOOD_FRAME + frame + GOOD_FRAME).encode(), reasons, 2)

    return [
        case("count", f"{LARGE}\n{XYZ}\nSi 0 0 0\n", "sites_too_many"),
        case("limit", f"1001\n{XYZ}\n" + "Si 0 0 0\n" * 1001, "sites_too_many"),
        case("word", f"one\n{XYZ}\nSi 0 0 0\n", "text_unreadable"),
        case("short", f"3\n{XYZ}\nSi 0 0 0\n", "text_unreadable"),
        case("rest", f"1\n{XYZ}\nSi 0 0 0\nSi 1 1 1\n", "text_unreadable"),
        case("none", f"0\n{XYZ}\n", "sites_missing"),
        case("plain", "1\nmade by hand\nSi 0 0 0\n", "cell_missing"),
        case("eight", f"1\n{XYZ.replace(' 6', '')}\nSi 0 0 0\n", "cell_missing"),
        case("lattice_nan", f"1\n{XYZ.replace('6', 'nan')}\nSi 0 0 0\n", "cell_nonfinite"),
        case("lattice_word", f"1\n{XYZ.replace('6', 'x')}\nSi 0 0 0\n", "cell_nonfinite"),
        case("lattice_zero", f"1\n{XYZ.replace('6', '0')}\nSi 0 0 0\n", "cell_zero"),
        case("lattice_plane", '1\nLattice="4 0 0 0 5 0 4 5 0"\nSi 0 0 0\n', "cell_zero"),
        case("lattice_huge", f"1\n{XYZ.replace('6', '6e7')}\nSi 0 0 0\n", "cell_absurd"),
        case("quotes", "1\n" + XYZ.replace('6"', "6") + "\nSi 0 0 0\n", "text_unreadable"),
        case("pbc_one", f'1\n{XYZ} pbc="T F F"\nSi 0 0 0\n', "periodicity_unsupported"),
        case("pbc_word", f'1\n{XYZ} pbc="yes no"\nSi 0 0 0\n', "text_unreadable"),
        case("two", f"1\n{XYZ}\nSi 0 0\n", "coordinates_missing"),
        case("no_pos", f"1\n{XYZ.replace('pos', 'place')}\nSi 0 0 0\n", "coordinates_missing"),
        case("nan", f"1\n{XYZ}\nSi nan 0 0\n", "coordinates_nonfinite"),
        case("letters", f"1\n{XYZ}\nSi a b c\n", "coordinates_nonfinite"),
        case("far", f"1\n{XYZ}\nSi 1e200 0 0\n", "coordinates_nonfinite"),
        case("element", f"1\n{XYZ}\nXx 0 0 0\n", "species_unknown"),
        case("number", f"1\n{XYZ.replace('species:S', 'Z:I')}\n119 0 0 0\n", "species_unknown"),
        case("occupancy", f"1\n{XYZ}:occupancy:R:1\nSi 0 0 0 1.5\n", "occupancy_invalid"),
        case("columns", f"1\n{XYZ}:x\nSi 0 0 0\n", "text_unreadable"),
    ]


def broken_optimade() -> list[Broken]:
    def case(name: str, *reasons: str, **changes: object) -> Broken:
        return Broken(f"{name}.jsonl", HEADER + GOOD_ENTRY + _entry(**changes) + GOOD_ENTRY, reasons, 2)

    def species(symbols: list[object], shares: list[object], **more: object) -> list[dict[str, object]]:
        return [{"name": "Si", "chemical_symbols": symbols, "concentration": shares, **more}]

    return [
        case("no_positions", "coordinates_missing", cartesian_site_positions="absent"),
        case("null_positions", "coordinates_missing", cartesian_site_positions=None),
        case("null_entry", "coordinates_missing", cartesian_site_positions=[[0, None, 0]]),
        case("null_row", "coordinates_missing", cartesian_site_positions=[None]),
        case("asymmetric", "coordinates_missing", nsites=4),
        case("span", "coordinates_missing", site_coordinate_span="asymmetric_unit"),
        case("implicit", "coordinates_missing", structure_features=["implicit_atoms"]),
        case("assemblies", "occupancy_invalid", structure_features=["assemblies"]),
        case("more_sites", "coordinates_missing", species_at_sites=["Si", "Si"], nsites=2),
        case("word", "coordinates_nonfinite", cartesian_site_positions=[["x", 0, 0]]),
        case("far", "coordinates_nonfinite", cartesian_site_positions=[[1e300, 0, 0]]),
        case("beyond", "coordinates_nonfinite", cartesian_site_positions=[[10**400, 0, 0]]),
        case("no_vectors", "cell_missing", lattice_vectors="absent"),
        case("null_vector", "cell_missing", lattice_vectors=[[4, 0, 0], [0, 5, 0], [None, None, None]]),
        case("flat", "cell_zero", lattice_vectors=[[4, 0, 0], [0, 5, 0], [4, 5, 0]]),
        case("vector_word", "cell_nonfinite", lattice_vectors=[[4, 0, 0], [0, 5, 0], [0, 0, "6"]]),
        case("chain", "periodicity_unsupported", dimension_types=[0, 1, 0]),
        case("no_species", "species_unknown", species="absent"),
        case("unknown", "species_unknown", species=species(["X"], [1.0])),
        case("undescribed", "species_unknown", species_at_sites=["Ge"]),
        case("attached", "coordinates_missing", species=species(["Si"], [1.0], attached=["H"], nattached=[3])),
        case("sum", "occupancy_invalid", species=species(["Si", "Ge"], [0.7, 0.7])),
        case("vacancies", "sites_missing", species=species(["vacancy"], [1.0])),
        case("no_sites", "sites_missing", species_at_sites=[], cartesian_site_positions=[], nsites=0),
        Broken("line.jsonl", HEADER + GOOD_ENTRY + b'{"id": \n' + GOOD_ENTRY, ("text_unreadable",), 2),
        Broken("page.json", b'{"data": [' + GOOD_ENTRY + b",", ("text_unreadable",)),
        Broken("page_entry.json", b'{"data":\n[' + GOOD_ENTRY + b", 5]}", ("text_unreadable",), 1),
    ]


def broken_poscar() -> list[Broken]:
    def case(name: str, reason: str, old: str = "", new: str = "") -> Broken:
        return Broken(f"{name}.vasp", POSCAR.replace(old, new, 1).encode() if old else new.encode(), (reason,))

    return [
        case("empty", "text_unreadable"),
        case("prose", "text_unreadable", new="one\ntwo\n"),
        case("scale", "text_unreadable", "1.0\n", "one\n"),
        case("scale_zero", "cell_zero", "1.0\n", "0.0\n"),
        case("three_scales", "cell_absurd", "1.0\n", "1 1 -1\n"),
        case("vector", "cell_missing", "0 5 0\n", "0 5\n"),
        case("vector_word", "cell_nonfinite", "0 5 0\n", "0 b 0\n"),
        case("vector_nan", "cell_nonfinite", "0 5 0\n", "0 nan 0\n"),
        case("plane", "cell_zero", "0 0 6\n", "4 5 0\n"),
        case("count", "sites_too_many", "Si\n1\n", f"Si\n{LARGE}\n"),
        case("count_zero", "sites_missing", "Si\n1\n", "Si\n0\n"),
        case("count_word", "text_unreadable", "Si\n1\n", "Si\none\n"),
        case("no_species", "species_unknown", "Si\n1\n", "1\n"),
        case("species", "species_unknown", "Si\n", "Xx\n"),
        case("fewer_species", "species_unknown", "Si\n1\n", "Si\n1 1\n"),
        case("no_mode", "text_unreadable", "Direct\n", ""),
        case("short", "text_unreadable", "Si\n1\n", "Si\n2\n"),
        case("two", "coordinates_missing", "Direct\n0 0 0", "Direct\n0 0"),
        case("nan", "coordinates_nonfinite", "Direct\n0 0 0", "Direct\nnan 0 0"),
        case("word", "coordinates_nonfinite", "Direct\n0 0 0", "Direct\nx y z"),
    ]


def broken_archives() -> list[Broken]:
    good = GOOD_CIF.encode()
    up = [("a.cif", good), ("x/../../b.cif", good), ("C:\\c.cif", good)]
    member = [("a.cif", good), ("b.cif.gz", b"no gzip"), ("c.cif", good)]
    # a.cif takes 1024 bytes, the header of b.cif 512: of the 2560 bytes left, the last block is incomplete.
    cut = _tar([("a.cif", good), ("b.cif", good * 200)])[:4096]
    hidden = [("._a.cif", b"x"), ("__MACOSX/a.cif", b"x"), ("notes.txt", b"x")]
    return [
        Broken("up.tar", _tar([("a.cif", good), ("../b.cif", good), ("c.cif", good)]), ("archive_unsafe",), 2),
        Broken("absolute.tar.gz", gzip.compress(_tar([("/b.cif", good), ("c.cif", good)])), ("archive_unsafe",), 1),
        Broken(
            "links.tar",
            _tar([("a.cif", good), ("b.cif", _link("b.cif", "/etc/hosts")), ("c.cif", _device("c.cif"))]),
            ("archive_unsafe", "archive_unsafe"),
            1,
        ),
        Broken("up.zip", _zip(up), ("archive_unsafe",) * 2, 1),
        Broken("nested.zip", _zip([("a.cif", good), ("b.zip", _zip([("c.cif", good)]))]), ("archive_unsafe",), 1),
        Broken("hidden.zip", _zip([("a.cif", good), *hidden]), (), 1),
        Broken("member.zip", _zip(member), ("file_unreadable",), 2),
        Broken("no.zip", b"PK this is no archive", ("file_unreadable",)),
        Broken("no.tar", b"this is no archive" * 100, ("file_unreadable",)),
        Broken("empty.tgz", b"", ("file_unreadable",)),
        Broken("cut.tar", cut, ("file_unreadable", "file_unreadable"), 1 + 2560 // len(good)),
        Broken("cut.tar.bz2", bz2.compress(_tar([("a.cif", good)]))[:-20], ("file_unreadable",)),
        Broken("header.tar", _tar([("a.cif", good)])[:1024] + b"x" * 2048, ("file_unreadable",), 1),
        Broken("bomb.zip", _zip([("a.cif", good), ("b.cif", b"# " * 40_000_000)]), ("archive_unsafe",), 1),
        Broken("bomb.cif.gz", gzip.compress(b"#" * 80_000_000, 9), ("archive_unsafe",)),
    ]


def broken_files() -> list[Broken]:
    """All of them."""
    return [
        *broken_cif(), *broken_tables(), *broken_xyz(), *broken_optimade(), *broken_poscar(), *broken_archives(),
    ]  # fmt: skip
