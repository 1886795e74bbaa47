"""How many operations the point group of a space or layer group has: a measure of how symmetric a crystal is.

Space groups of one point group have consecutive numbers, and so have layer groups (International Tables for
Crystallography A and E; values from memory, checked against gemmi's operations).
"""

from __future__ import annotations

from bisect import bisect_left

_SPACE_GROUPS = (
    (1, 1), (2, 2), (9, 2), (15, 4), (46, 4), (74, 8), (82, 4), (122, 8), (142, 16), (146, 3), (161, 6), (167, 12),
    (174, 6), (190, 12), (194, 24), (199, 12), (220, 24), (230, 48),
)  # fmt: skip
"""(last number, order) of each run of numbers with one order, ascending."""

_LAYER_GROUPS = (
    (1, 1), (5, 2), (7, 4), (13, 2), (18, 4), (36, 4), (48, 8), (50, 4), (60, 8), (64, 16), (65, 3), (70, 6), (72, 12),
    (74, 6), (79, 12), (80, 24),
)  # fmt: skip


def point_group_order(number: int, layer: bool = False) -> int:
    """Operations in the point group of space group `number` (1 to 230), or of layer group `number` (1 to 80)."""
    table = _LAYER_GROUPS if layer else _SPACE_GROUPS
    if not 1 <= number <= table[-1][0]:
        raise ValueError(f"there is no {'layer' if layer else 'space'} group {number}")
    return table[bisect_left(table, (number, 0))][1]
