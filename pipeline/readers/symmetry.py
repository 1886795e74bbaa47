"""Symmetry operations as files list or name them, and the sites that they make of an asymmetric unit.

An operation maps fractional columns, x' = R x + t. A list is taken as it stands, in whatever setting, but it must be a
group modulo the lattice: then the images of a site are the cosets of its stabiliser, and their number is exact even
where a special position is given with few digits.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import lcm

import numpy as np
from numpy.typing import NDArray

from .sites import StructureRefused

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

MAX_OPERATIONS = 768
"""A longer list is refused: 192 is the most that a space group has in a conventional cell, four times that is room."""

SPECIAL_POSITION = 0.1
"""angstrom: a site whose image lies this close stands on a special position. Two real atoms are never that close."""

SPECIAL_POSITION_PARTIAL = 0.02
"""angstrom: the same for sites at most half filled, which may be split about the special position on purpose."""

_TERM = re.compile(r"([+-]?)(\d+/\d+|\d+\.?\d*|\.\d+)?\*?([xyz])?")


@dataclass(frozen=True, slots=True)
class Operations:
    """A group of symmetry operations modulo the lattice."""

    rotations: Floats
    """(n, 3, 3): x' = R x + t on fractional columns."""

    translations: Floats
    """(n, 3), fractional, 0 to 1."""

    table: Ints
    """(n, n): table[i, j] is the operation "first j, then i"."""

    def __len__(self) -> int:
        return len(self.rotations)


def _component(text: str, triplet: str) -> tuple[list[int], Fraction]:
    row, shift = [0, 0, 0], Fraction(0)
    at = 0
    while at < len(text):
        match = _TERM.match(text, at)
        if match is None or match.end() == at or (match[2] is None and match[3] is None):
            raise StructureRefused("symmetry_unreadable", f"symmetry operation {triplet!r}")
        sign = -1 if match[1] == "-" else 1
        if at > 0 and not match[1]:
            raise StructureRefused("symmetry_unreadable", f"symmetry operation {triplet!r}")
        value = Fraction(1)
        if match[2]:
            try:
                value = Fraction(match[2].rstrip("."))
            except (ValueError, ZeroDivisionError):
                raise StructureRefused("symmetry_unreadable", f"symmetry operation {triplet!r}") from None
            if "." in match[2]:
                # 0.333 is meant as 1/3: the nearest 24th where it is that close, else the decimal as it stands.
                nearest = Fraction(round(value * 24), 24)
                value = nearest if abs(nearest - value) <= Fraction(35, 10_000) else value
        if match[3]:
            if value.denominator != 1:
                raise StructureRefused("symmetry_unreadable", f"symmetry operation {triplet!r}")
            row["xyz".index(match[3])] += sign * value.numerator
        else:
            shift += sign * value
        at = match.end()
    return row, shift


def parse_triplet(triplet: str) -> tuple[list[list[int]], list[Fraction]]:
    """Rotation (3, 3) and translation of an operation such as `-y, x-y, z+1/3`.

    Raises StructureRefused (symmetry_unreadable).
    """
    parts = triplet.strip().strip("'\"").lower().replace(" ", "").replace("\t", "").split(",")
    if len(parts) != 3 or not all(parts):
        raise StructureRefused("symmetry_unreadable", f"symmetry operation {triplet!r} does not have three parts")
    rows = [_component(p, triplet) for p in parts]
    return [r for r, _ in rows], [t for _, t in rows]


@lru_cache(maxsize=512)
def operations_of(triplets: tuple[str, ...]) -> Operations:
    """The group of the listed operations; repeats in the list are dropped.

    Raises StructureRefused (symmetry_unreadable) for text that is no operation and for a list that is no group.
    """
    if len(triplets) > MAX_OPERATIONS:
        raise StructureRefused("symmetry_unreadable", f"{len(triplets)} symmetry operations are listed")
    parsed = [parse_triplet(t) for t in triplets]
    unit = lcm(*(x.denominator for _, shift in parsed for x in shift))
    if unit > 300:
        raise StructureRefused("symmetry_unreadable", "the translations of the operations have no common fraction")
    rotations = np.array([r for r, _ in parsed], dtype=np.int64)
    shifts = np.array([[int(x * unit) % unit for x in t] for _, t in parsed], dtype=np.int64)
    if np.abs(rotations).max() > 8 or (np.abs(np.rint(np.linalg.det(rotations))) != 1).any():
        raise StructureRefused("symmetry_unreadable", "an operation does not map the lattice onto itself")
    keys = _keys(rotations, shifts, unit)
    keys, first = np.unique(keys, return_index=True)
    first.sort()
    rotations, shifts = rotations[first], shifts[first]
    n = len(first)
    products = np.einsum("aij,bjk->abik", rotations, rotations)
    moved = (np.einsum("aij,bj->abi", rotations, shifts) + shifts[:, None]) % unit
    found = _keys(products.reshape(-1, 3, 3), moved.reshape(-1, 3), unit)
    at = np.minimum(np.searchsorted(keys, found), n - 1)
    if np.abs(products).max() > 8 or (keys[at] != found).any():
        raise StructureRefused(
            "symmetry_unreadable", f"the {n} listed symmetry operations are no group: some are missing or mistyped"
        )
    in_list_order = np.argsort(_keys(rotations, shifts, unit))
    return Operations(rotations.astype(np.float64), shifts / unit, in_list_order[at].reshape(n, n))


def _keys(rotations: Ints, shifts: Ints, unit: int) -> Ints:
    """One integer an operation, distinct for rotation entries within 8 and units within 300: 17^9 300^3 < 2^62."""
    key = np.zeros(len(rotations), dtype=np.int64)
    for column in rotations.reshape(-1, 9).T:
        key = key * 17 + (column + 8)
    for column in shifts.T:
        key = key * unit + column
    return key


def expand(
    operations: Operations, cell: Sequence[float], positions: Floats, occupancies: Sequence[float], max_sites: int
) -> tuple[Floats, Ints]:
    """All sites of the cell from those of the asymmetric unit.

    cell: nine numbers (rows a, b, c, angstrom). positions: (m, 3), fractional. Returns the (sites, 3) positions and the
    (sites,) index of the row that each came from, row by row in the order of the operations. A site that an operation
    maps onto itself within the distance of a special position is first moved exactly onto that position (the mean of
    its images under its stabiliser), so that its images are images of one point.

    Raises StructureRefused (sites_too_many), before more than max_sites rows are expanded.
    """
    if len(positions) > max_sites:
        raise StructureRefused("sites_too_many", f"{len(positions)} sites before symmetry; max_sites is {max_sites}")
    n = len(operations)
    matrix = np.array(cell, np.float64).reshape(3, 3)
    images = np.einsum("nij,mj->mni", operations.rotations, positions) + operations.translations
    away = images - positions[:, None]
    away -= np.rint(away)
    squared = ((away @ matrix) ** 2).sum(axis=2)
    within = np.where(np.asarray(occupancies) > 0.5, SPECIAL_POSITION, SPECIAL_POSITION_PARTIAL)
    close = squared <= within[:, None] ** 2
    by_stabiliser: dict[bytes, list[int]] = {}
    for i, row in enumerate(close):
        by_stabiliser.setdefault(row.tobytes(), []).append(i)
    parts: list[tuple[int, Floats]] = []
    total = 0
    for pattern, members in by_stabiliser.items():
        stabiliser = _closure(operations.table, np.flatnonzero(np.frombuffer(pattern, dtype=bool)))
        at = np.array(members)
        moved = positions[at] + away[np.ix_(at, stabiliser)].mean(axis=1)
        first = np.arange(n)
        if len(stabiliser) > 1:
            again = np.einsum("nij,mj->mni", operations.rotations[stabiliser], moved)
            again += operations.translations[stabiliser] - moved[:, None]
            again -= np.rint(again)
            if (((again @ matrix) ** 2).sum(axis=2) > 1e-10).any():
                # The operations near this site fix no common point: leave its images apart, to be refused as overlaps.
                moved = positions[at]
            else:
                first = np.flatnonzero(operations.table[:, stabiliser].min(axis=1) == np.arange(n))
        total += len(members) * len(first)
        if total > max_sites:
            raise StructureRefused("sites_too_many", f"at least {total} sites after symmetry; max_sites is {max_sites}")
        orbit = np.einsum("nij,mj->mni", operations.rotations[first], moved) + operations.translations[first]
        parts.extend(zip(members, orbit, strict=True))
    parts.sort(key=lambda part: part[0])
    index = np.repeat(np.array([i for i, _ in parts], np.int64), [len(orbit) for _, orbit in parts])
    return np.concatenate([orbit for _, orbit in parts]), index


def _closure(table: Ints, members: Ints) -> Ints:
    """The subgroup that operations generate (sorted indices)."""
    while True:
        products = np.unique(table[np.ix_(members, members)])
        if len(products) == len(members):
            return members
        members = np.union1d(members, products)
