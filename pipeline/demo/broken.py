"""What is broken in the demo collection: files, rows and frames that have to be refused, each for a known reason."""

from __future__ import annotations

import json
from collections.abc import Sequence

_CUBE = ("5", "5", "5", "90", "90", "90")
_ROCK_SALT = ("Na 0 0 0", "Na 0.5 0.5 0", "Na 0.5 0 0.5", "Na 0 0.5 0.5", "Cl 0.5 0.5 0.5", "Cl 0 0 0.5", "Cl 0 0.5 0",
              "Cl 0.5 0 0")  # fmt: skip


def _cif(
    block: str,
    cell: Sequence[str] = _CUBE,
    sites: Sequence[str] = _ROCK_SALT,
    tags: Sequence[str] = ("type_symbol", "fract_x", "fract_y", "fract_z"),
    symmetry: str = "",
) -> str:
    names = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
    lines = [f"data_{block}"]
    lines += [f"_cell_{name} {value}" for name, value in zip(names, cell, strict=True)]
    if symmetry:
        lines.append(symmetry)
    lines += ["loop_", *(f"_atom_site_{tag}" for tag in tags), *sites]
    return "\n".join(lines) + "\n"


def broken_cifs() -> list[tuple[str, str, str]]:
    """(name, text of one block, reason)."""
    share = ("type_symbol", "fract_x", "fract_y", "fract_z", "occupancy")
    general = [f"Si 0.0{i}7 0.1{i}6 0.3{i}3" for i in range(1, 9)]
    cubic = "_space_group_name_H-M_alt 'F m -3 m'"
    return [
        ("torn", _cif("torn").rsplit("\n", 3)[0] + "\n'Cl", "text_unreadable"),
        ("no-edge", _cif("no-edge", ("5", "?", "5", "90", "90", "90")), "cell_missing"),
        ("no-number", _cif("no-number", ("5", "wide", "5", "90", "90", "90")), "cell_nonfinite"),
        ("flat", _cif("flat", ("5", "5", "5", "60", "60", "120")), "cell_zero"),
        ("tiny", _cif("tiny", ("0.05", "5", "5", "90", "90", "90")), "cell_absurd"),
        ("empty", _cif("empty", sites=()).split("loop_")[0], "sites_missing"),
        ("half-known", _cif("half-known", sites=("Na 0 0 0", "Cl 0.5 ? 0.5")), "coordinates_missing"),
        ("far-away", _cif("far-away", sites=("Na 0 0 0", "Cl 0.5 1e9 0.5")), "coordinates_nonfinite"),
        ("unheard-of", _cif("unheard-of", sites=("Na 0 0 0", "Qx 0.5 0.5 0.5")), "species_unknown"),
        ("crowded", _cif("crowded", sites=("Na 0 0 0 0.8", "K 0 0 0 0.7"), tags=share), "occupancy_invalid"),
        ("twice", _cif("twice", sites=(*_ROCK_SALT, "Na 0.004 0 0")), "sites_overlap"),
        ("too-many", _cif("too-many", sites=general, symmetry=cubic), "sites_too_many"),
        ("odd-group", _cif("odd-group", symmetry="_space_group_symop_operation_xyz 'x,y,w'"), "symmetry_unreadable"),
    ]  # fmt: skip


def broken_rows() -> list[tuple[str, str | None, str]]:
    """(name, text of the structure column, reason), for tables."""
    return [
        ("lost", None, "text_missing"),
        ("cut", _cif("cut")[:150], "text_unreadable"),
        ("log-line", "walltime exceeded; no structure written", "text_unreadable"),
    ]


SHORT_ROW = "short"
"""Label of a row of the CSV table that has too few fields (text_unreadable)."""

TORN_LINE = '{"id": "torn", "cif": "data_x'
"""A line of a JSON-lines file that is no JSON (text_unreadable)."""

BROKEN_FRAMES: tuple[tuple[str, str, str], ...] = (
    ("vacuum", '2\nProperties=species:S:1:pos:R:3 label="vacuum"\nO 0 0 0\nO 0 0 1.2\n', "cell_missing"),
    (
        "molecule",
        '2\nLattice="9 0 0 0 9 0 0 0 9" Properties=species:S:1:pos:R:3 label="molecule" pbc="F F F"\n'
        "N 0 0 0\nN 0 0 1.1\n",
        "periodicity_unsupported",
    ),
    (
        "short-frame",
        '3\nLattice="3 0 0 0 3 0 0 0 3" Properties=species:S:1:pos:R:3 label="short-frame"\nFe 0 0 0\nFe 1.5 1.5 1.5\n',
        "text_unreadable",
    ),
)
"""(label, frame, reason)."""


def broken_entries() -> list[tuple[str, str, str]]:
    """(id, OPTIMADE line, reason)."""
    whole = {
        "nsites": 1,
        "dimension_types": [1, 1, 1],
        "nperiodic_dimensions": 3,
        "lattice_vectors": [[3, 0, 0], [0, 3, 0], [0, 0, 3]],
        "cartesian_site_positions": [[0, 0, 0]],
        "species": [{"name": "Po", "chemical_symbols": ["Po"], "concentration": [1]}],
        "species_at_sites": ["Po"],
    }
    changes: list[tuple[str, dict[str, object], str]] = [
        ("nowhere", {"cartesian_site_positions": None}, "coordinates_missing"),
        ("unbounded", {"lattice_vectors": None}, "cell_missing"),
        ("chain", {"dimension_types": [0, 0, 1], "nperiodic_dimensions": 1}, "periodicity_unsupported"),
    ]
    return [
        (name, json.dumps({"id": name, "type": "structures", "attributes": {**whole, **change}}), reason)
        for name, change, reason in changes
    ]


BROKEN_POSCARS: tuple[tuple[str, str, str], ...] = (
    ("scrap-1", "scrap\n1.0\n4 0 0\n0 4 0\n0 0 4\nNa Cl\n1 1\nDirect\n0 0 0\n", "text_unreadable"),
    ("scrap-2", "scrap\n1.0\n4 0 0\n0 4 0\n8 8 0\nNa Cl\n1 1\nDirect\n0 0 0\n0.5 0.5 0.5\n", "cell_zero"),
)
"""(stem, text, reason)."""

NOT_GZIP = b"this was once a compressed file\n"
"""Content of a file that ends in .gz and cannot be decompressed (file_unreadable)."""
