"""How invented workflows write structures down: CIF, POSCAR-style, extended XYZ and OPTIMADE texts in several manners.

These are not the product's own writers: what a reader is shown should not come from the hand that checks it. Numbers
are written with so many digits that nothing is lost that a key could see, and formatted by Python alone.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Sequence

from ..model.batch import Floats
from .disguises import Crystal, product, right_handed

_PART = re.compile(r"([A-Z][a-z]?)(\d*\.?\d*)")


def number(x: float, digits: int = 12) -> str:
    """x with so many decimals, without a minus sign on zero."""
    text = f"{x:.{digits}f}"
    return text[1:] if text.startswith("-") and not text.strip("-0.") else text


def parts_of(token: str) -> list[tuple[str, float]]:
    """(element, occupancy) of a token such as Fe or Fe0.5Ni0.5."""
    return [(e, float(x) if x else 1.0) for e, x in _PART.findall(token)]


def cell_lines(cell: Floats, digits: int = 10) -> list[str]:
    """The six cell items of a CIF."""
    rows = cell.tolist()
    edges = [math.sqrt(sum(x * x for x in row)) for row in rows]
    lines = [f"_cell_length_{n} {number(e, digits)}" for n, e in zip("abc", edges, strict=True)]
    for name, i, j in (("alpha", 1, 2), ("beta", 0, 2), ("gamma", 0, 1)):
        cosine = sum(x * y for x, y in zip(rows[i], rows[j], strict=True)) / (edges[i] * edges[j])
        angle = math.degrees(math.acos(max(-1.0, min(1.0, cosine))))
        lines.append(f"_cell_angle_{name} {number(angle, digits)}")
    return lines


def cif(crystal: Crystal, block: str, digits: int = 12) -> str:
    """A CIF without symmetry: every site of the cell, mixed sites as rows on one place."""
    cell, positions, tokens = right_handed(crystal)
    return cif_of_sites(
        cell_lines(cell, min(digits, 10)),
        list(zip(tokens, positions.tolist(), strict=True)),
        block,
        ("x,y,z",),
        digits,
    )


def cif_of_sites(
    cell: Sequence[str],
    sites: Sequence[tuple[str, Sequence[float]]],
    block: str,
    operations: Sequence[str],
    digits: int = 12,
) -> str:
    """A CIF of the sites that the operations make the others from."""
    lines = [f"data_{block}", *cell, "loop_", "_space_group_symop_operation_xyz"]
    lines += [f"'{op}'" for op in operations]
    lines += ["loop_", "_atom_site_label", "_atom_site_type_symbol"]
    lines += [f"_atom_site_fract_{axis}" for axis in "xyz"] + ["_atom_site_occupancy"]
    for i, (token, at) in enumerate(sites, 1):
        place = " ".join(number(x, digits) for x in at)
        lines += [f"{element}{i} {element} {place} {share:g}" for element, share in parts_of(token)]
    return "\n".join(lines) + "\n"


def poscar(crystal: Crystal, comment: str, manner: int) -> str:
    """A POSCAR-style text. manner 0: direct; 1: Cartesian; 2: direct, with a scale; 3: with selective dynamics."""
    cell, positions, tokens = crystal
    elements = sorted(set(tokens))
    order = sorted(range(len(tokens)), key=lambda i: (elements.index(tokens[i]), i))
    scale = 2.0 if manner == 2 else 1.0
    lines = [comment, number(scale, 6)]
    lines += ["  " + " ".join(number(x / scale, 14) for x in row) for row in cell.tolist()]
    lines += [" ".join(elements), " ".join(str(tokens.count(e)) for e in elements)]
    if manner == 3:
        lines.append("Selective dynamics")
    lines.append("Cartesian" if manner == 1 else "Direct")
    rows = (product(positions, cell) if manner == 1 else positions)[order].tolist()
    lines += ["  " + " ".join(number(x, 14) for x in row) + (" T T F" if manner == 3 else "") for row in rows]
    return "\n".join(lines) + "\n"


def xyz_frame(crystal: Crystal, comment: str) -> str:
    """A frame of extended XYZ; the comment holds further key=value pairs."""
    cell, positions, tokens = crystal
    lattice = " ".join(number(x, 14) for row in cell.tolist() for x in row)
    head = f'Lattice="{lattice}" Properties=species:S:1:pos:R:3 {comment} pbc="T T T"'
    sites = product(positions, cell).tolist()
    rows = [f"{t} " + " ".join(number(x, 14) for x in at) for t, at in zip(tokens, sites, strict=True)]
    return "\n".join([str(len(tokens)), head, *rows]) + "\n"


def optimade_attributes(crystal: Crystal) -> dict[str, object]:
    """The structural attributes of an OPTIMADE entry of type `structures`."""
    cell, positions, tokens = crystal
    names = sorted(set(tokens))
    elements = sorted({e for t in names for e, _ in parts_of(t)})
    species = [
        {
            "name": t,
            "chemical_symbols": [e for e, _ in parts_of(t)],
            "concentration": [x for _, x in parts_of(t)],
        }
        for t in names
    ]
    return {
        "elements": elements,
        "nelements": len(elements),
        "nsites": len(tokens),
        "dimension_types": [1, 1, 1],
        "nperiodic_dimensions": 3,
        "lattice_vectors": _rounded(cell),
        "cartesian_site_positions": _rounded(product(positions, cell)),
        "species": species,
        "species_at_sites": tokens,
    }


def optimade_entry(identity: str, attributes: dict[str, object]) -> str:
    """One line of an OPTIMADE JSON-lines file."""
    return json.dumps({"id": identity, "type": "structures", "attributes": attributes}, separators=(",", ":"))


OPTIMADE_HEADER = json.dumps({"x-optimade": {"meta": {"api_version": "1.3.0"}}})


def _rounded(rows: Floats) -> list[list[float]]:
    return [[round(x, 14) + 0.0 for x in row] for row in rows.tolist()]
