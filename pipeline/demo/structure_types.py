"""The 84 structure types that the demo collection and the tests build crystals from.

structure_types.csv was written from memory of the Strukturbericht and Pearson's handbook, parameters of textbook
accuracy; its space groups and Pearson symbols were checked with two symmetry libraries.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from importlib.resources import files

import gemmi
import numpy as np

from ..model.batch import Floats


@dataclass(frozen=True, slots=True)
class StructureType:
    """One structure type with its full conventional cell."""

    label: str
    """Strukturbericht label, or `-`."""

    prototype: str
    pearson: str
    pearson_hexagonal: str
    """For hR types, the Pearson symbol counted in the hexagonal cell; else empty."""

    space_group: int
    cell: Floats
    """(3, 3) float64, angstrom, rows are the conventional lattice vectors."""

    positions: Floats
    """(n, 3) float64, fractional, all sites of the conventional cell."""

    species: tuple[str, ...]
    """n element symbols."""

    sites_primitive: int

    asymmetric_unit: tuple[tuple[str, tuple[float, float, float]], ...]
    """(element, fractional position) of one site an orbit."""

    operations: tuple[str, ...]
    """Symmetry operations of the conventional cell as triplets `x,y,z`, centring included."""


def _group(number: int, origin: int) -> gemmi.SpaceGroup:
    """The space group in the setting of the table: hexagonal axes for R, the origin choice named."""
    fits = [g for g in gemmi.spacegroup_table() if g.number == number]
    for g in fits:
        if g.ext in ("H", str(origin)):
            return g
    return next(g for g in fits if g.ext in ("\0", "", "1") or len(fits) == 1 or g.is_reference_setting())


def structure_types() -> list[StructureType]:
    """All types of the table, in its order."""
    out = []
    with (files("lattice_census.demo") / "structure_types.csv").open(encoding="utf-8") as f:
        for row in csv.DictReader(f):
            parameters = [float(x) for x in row["a b c alpha beta gamma"].split()]
            cell = gemmi.UnitCell(*parameters)
            operations = _group(int(row["space_group"]), int(row["origin_setting"])).operations()
            positions: list[Floats] = []
            species: list[str] = []
            unit: list[tuple[str, tuple[float, float, float]]] = []
            orth = np.array(cell.orth.mat.tolist()).T
            for site in row["basis (element x y z)"].split(";"):
                element, *xyz = site.split()
                # The table gives thirds to five digits; the special position is meant.
                start = np.array([_third(float(x)) for x in xyz])
                unit.append((element, (float(start[0]), float(start[1]), float(start[2]))))
                found: list[Floats] = []
                for op in operations:
                    x = _image(op, start)
                    if all(_distance(x - y, orth) > 0.05 for y in found):
                        found.append(x)
                positions += found
                species += [element] * len(found)
            out.append(
                StructureType(
                    row["strukturbericht"],
                    row["prototype"],
                    row["pearson"],
                    row["pearson_hex_count"],
                    int(row["space_group"]),
                    orth,
                    np.array(positions),
                    tuple(species),
                    int(row["n_atoms_primitive"]),
                    tuple(unit),
                    tuple(op.triplet() for op in operations),
                )
            )
    return out


def _image(op: gemmi.Op, at: Floats) -> Floats:
    """The image of a position, inside the cell; term by term, so that it has the same bits on every machine."""
    x, y, z = at.tolist()
    rows = zip(op.rot, op.tran, strict=True)
    image = [(r[0] // op.DEN * x + r[1] // op.DEN * y + r[2] // op.DEN * z) + t / op.DEN for r, t in rows]
    return np.array(image) % 1.0


def _third(x: float) -> float:
    for target in (1 / 3, 2 / 3, 1 / 6, 5 / 6):
        if abs(abs(x) - target) < 2e-5:
            return float(np.copysign(target, x))
    return x


def _distance(difference: Floats, cell: Floats) -> float:
    return float(np.linalg.norm((difference - np.round(difference)) @ cell))
