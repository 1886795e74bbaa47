"""Symmetry operations from the name or number of a space group, where a file lists no operations.

The tables are those of gemmi. A name that leaves the setting open is not guessed at: of the groups with two origin
choices the origin must be said, hexagonal and rhombohedral axes are told apart by the cell, and operations that do not
fit the cell are refused, since the setting is then another one than the table's.
"""

from __future__ import annotations

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
    metric = np.array(cell).reshape(3, 3) @ np.array(cell).reshape(3, 3).T
    lengths = np.sqrt(np.diag(metric))
    alpha, gamma = (
        float(np.degrees(np.arccos(np.clip(metric[i, j] / lengths[i] / lengths[j], -1, 1))))
        for i, j in ((1, 2), (0, 1))
    )
    stated = [f"Hall symbol {hall!r}"] if hall else []
    triplets: tuple[str, ...] | None = _by_hall(hall) if hall else None
    if triplets is None:
        for name in names:
            stated.append(f"space group {name!r}")
            triplets = _by_name(name, setting, round(alpha, 1), round(gamma, 1))
            if triplets is not None:
                break
    if triplets is None and number:
        stated.append(f"space group number {number}")
        triplets = _by_number(number, setting, round(alpha, 1), round(gamma, 1))
    if triplets is None:
        if stated:
            raise StructureRefused("symmetry_unreadable", f"cannot understand {', '.join(stated)}")
        return None
    operations = operations_of(triplets)
    kept = np.einsum("nki,kl,nlj->nij", operations.rotations, metric, operations.rotations) - metric
    if (np.abs(kept) > METRIC_MISFIT * np.outer(lengths, lengths)).any():
        raise StructureRefused(
            "symmetry_unreadable", f"{stated[-1]} does not fit the cell: another setting is meant; list the operations"
        )
    return operations


def _triplets(group: gemmi.GroupOps) -> tuple[str, ...]:
    return tuple(op.triplet() for op in group)


@lru_cache(maxsize=1024)
def _by_hall(symbol: str) -> tuple[str, ...] | None:
    try:
        return _triplets(gemmi.symops_from_hall(symbol))
    except (RuntimeError, ValueError):
        return None


@lru_cache(maxsize=4096)
def _by_name(name: str, setting: str | None, alpha: float, gamma: float) -> tuple[str, ...] | None:
    text = re.sub(r"\s+", " ", name.replace("_", " ")).strip()
    # Databases append Z or S for the second or first origin, and H or R for hexagonal or rhombohedral axes.
    suffix = re.fullmatch(r"(.*[^:\s])\s?:?\s?([12HRSZhrsz])", text)
    if suffix and (suffix[2] in "SZsz" or ":" in text):
        text, setting = suffix[1].rstrip(": "), {"S": "1", "Z": "2"}.get(suffix[2].upper(), suffix[2].upper())
    return _of_group(gemmi.find_spacegroup_by_name(text, alpha, gamma), setting, f"space group {name!r}")


@lru_cache(maxsize=1024)
def _by_number(number: str, setting: str | None, alpha: float, gamma: float) -> tuple[str, ...] | None:
    if not re.fullmatch(r"\d{1,3}", number) or not 1 <= int(number) <= 230:
        return None
    standard = gemmi.find_spacegroup_by_number(int(number))
    group = gemmi.find_spacegroup_by_name(standard.hm, alpha, gamma) or standard
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
