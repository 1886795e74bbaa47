"""Symmetry operations from the name or number of a space group, where a file lists no operations.

The tables are those of gemmi. A name that leaves the setting open is not guessed at: of the groups with two origin
choices the origin must be said, hexagonal and rhombohedral axes are told apart by the cell, and operations that do not
fit the cell are refused, since the setting is then another one than the table's.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from functools import lru_cache

import gemmi
import numpy as np

from .sites import StructureRefused
from .symmetry import Operations, operations_of

METRIC_MISFIT = 0.03
"""Operations found by name must keep the cell's metric to this, relative to the edges."""


def operations_of_names(
    hall: str | None, names: Sequence[str], number: str | None, setting: str | None, cell: Sequence[float]
) -> Operations | None:
    """Operations by Hall symbol, else Hermann-Mauguin names in the order given, else number; None if none is stated.

    setting: the code of the coordinate system (`1`, `2`, `H`, `R`) if the file states one. cell: nine numbers, rows.
    Raises StructureRefused (symmetry_unreadable).
    """
    stated = [f"Hall symbol {hall!r}"] if hall else []
    triplets: tuple[str, ...] | None = _by_hall(hall) if hall else None
    if triplets is None:
        for name in names:
            stated.append(f"space group {name!r}")
            triplets = _by_name(name, setting, _axes(name, cell))
            if triplets is not None:
                break
    if triplets is None and number:
        stated.append(f"space group number {number}")
        triplets = _by_number(number, setting, _angles(cell))
    if triplets is None:
        if stated:
            raise StructureRefused("symmetry_unreadable", f"cannot understand {', '.join(stated)}")
        return None
    operations = operations_of(triplets)
    if len(operations) > 1:
        metric = np.array(cell).reshape(3, 3) @ np.array(cell).reshape(3, 3).T
        lengths = np.sqrt(np.diag(metric))
        kept = np.einsum("nki,kl,nlj->nij", operations.rotations, metric, operations.rotations) - metric
        if (np.abs(kept) > METRIC_MISFIT * np.outer(lengths, lengths)).any():
            raise StructureRefused(
                "symmetry_unreadable",
                f"{stated[-1]} does not fit the cell: another setting is meant; list the operations",
            )
    return operations


def _angles(cell: Sequence[float]) -> tuple[float, float]:
    """alpha and gamma of a cell of nine numbers, to 0.1 degree: they tell hexagonal from rhombohedral axes."""
    a, b, c = cell[0:3], cell[3:6], cell[6:9]
    return _angle(b, c), _angle(a, b)


def _angle(u: Sequence[float], v: Sequence[float]) -> float:
    cosine = sum(x * y for x, y in zip(u, v, strict=True)) / math.hypot(*u) / math.hypot(*v)
    return round(math.degrees(math.acos(max(-1.0, min(1.0, cosine)))), 1)


def _axes(name: str, cell: Sequence[float]) -> tuple[float, float]:
    """The angles of the cell where a name's group depends on them, else none."""
    return _angles(cell) if _has_two_axes(name) else (0.0, 0.0)


@lru_cache(maxsize=4096)
def _has_two_axes(name: str) -> bool:
    group = gemmi.find_spacegroup_by_name(_plain_name(name)[0])
    return group is None or group.ext in ("H", "R")


def _triplets(group: gemmi.GroupOps) -> tuple[str, ...]:
    return tuple(op.triplet() for op in group)


@lru_cache(maxsize=1024)
def _by_hall(symbol: str) -> tuple[str, ...] | None:
    try:
        return _triplets(gemmi.symops_from_hall(symbol))
    except (RuntimeError, ValueError):
        return None


def _plain_name(name: str) -> tuple[str, str | None]:
    """The name as gemmi has it, and the setting that a database appended to it."""
    text = re.sub(r"\s+", " ", name.replace("_", " ")).strip()
    # Databases append Z or S for the second or first origin, and H or R for hexagonal or rhombohedral axes.
    suffix = re.fullmatch(r"(.*[^:\s])\s?:?\s?([12HRSZhrsz])", text)
    if suffix and (suffix[2] in "SZsz" or ":" in text):
        return suffix[1].rstrip(": "), {"S": "1", "Z": "2"}.get(suffix[2].upper(), suffix[2].upper())
    return text, None


@lru_cache(maxsize=4096)
def _by_name(name: str, setting: str | None, axes: tuple[float, float]) -> tuple[str, ...] | None:
    text, appended = _plain_name(name)
    return _of_group(gemmi.find_spacegroup_by_name(text, *axes), appended or setting, f"space group {name!r}")


@lru_cache(maxsize=1024)
def _by_number(number: str, setting: str | None, axes: tuple[float, float]) -> tuple[str, ...] | None:
    if not re.fullmatch(r"\d{1,3}", number) or not 1 <= int(number) <= 230:
        return None
    standard = gemmi.find_spacegroup_by_number(int(number))
    group = gemmi.find_spacegroup_by_name(standard.hm, *axes) or standard
    return _of_group(group, setting, f"space group number {number}")


def _of_group(group: gemmi.SpaceGroup | None, setting: str | None, shown: str) -> tuple[str, ...] | None:
    if group is None:
        return None
    if group.ext in ("1", "2"):
        if setting not in ("1", "2"):
            raise StructureRefused(
                "symmetry_unreadable", f"{shown} has two choices of origin and the file does not say which is meant"
            )
        group = gemmi.find_spacegroup_by_name(f"{group.hm}:{setting}") or group
    elif group.ext in ("H", "R") and setting in ("H", "R"):
        group = gemmi.find_spacegroup_by_name(f"{group.hm}:{setting}") or group
    return _triplets(group.operations())
