"""What a data block of a CIF says about symmetry."""

from __future__ import annotations

from collections.abc import Sequence

import gemmi

from .sites import StructureRefused
from .space_group_names import operations_of_names
from .symmetry import Operations, operations_of

_OPERATIONS = (
    "_space_group_symop_operation_xyz",
    "_symmetry_equiv_pos_as_xyz",
    "_space_group_symop.operation_xyz",
    "_symmetry_equiv.pos_as_xyz",
)
_HALL = ("_space_group_name_Hall", "_symmetry_space_group_name_Hall", "_space_group.name_Hall")
_NAMES = (
    "_space_group_name_H-M_alt",
    "_symmetry_space_group_name_H-M",
    "_space_group_name_H-M_full",
    "_space_group.name_H-M_alt",
    "_space_group.name_H-M_full",
    "_symmetry.space_group_name_H-M",
)
_NUMBERS = (
    "_space_group_IT_number",
    "_symmetry_Int_Tables_number",
    "_space_group.IT_number",
    "_symmetry.Int_Tables_number",
)
_SETTINGS = ("_space_group_IT_coordinate_system_code", "_space_group.IT_coordinate_system_code")
_OTHER_SYMMETRY = (
    "_space_group_symop_magn_operation.xyz",
    "_space_group_symop_magn_operation_xyz",
    "_space_group_symop_ssg_operation_algebraic",
    "_space_group_symop_magn_ssg_operation.algebraic",
    "_space_group_ssg_name",
)
_UNKNOWN = frozenset({"?", "."})


def symmetry_of(block: gemmi.cif.Block, cell: list[float]) -> Operations | None:
    """The operations that a block states for a cell of nine numbers; None where it states nothing.

    Listed operations are authoritative; else the Hall symbol, the Hermann-Mauguin names and the number, in that order.
    Raises StructureRefused (symmetry_unreadable).
    """
    for tag in _OPERATIONS:
        loop = block.find_loop(tag).get_loop()
        if loop is None:
            listed = (block.find_value(tag),)
        else:
            at = [t.lower() for t in loop.tags].index(tag.lower())
            listed = tuple(loop.values[at :: loop.width()])
        if listed and listed[0] and not _UNKNOWN.issuperset(listed):
            return operations_of(listed)
    hall = _first(block, _HALL)
    names = [n for tag in _NAMES if (n := _value(block, tag))]
    operations = operations_of_names(hall, names, _first(block, _NUMBERS), _first(block, _SETTINGS), cell)
    if operations is None:
        other = [tag for tag in _OTHER_SYMMETRY if len(block.find_values(tag))]
        if other:
            raise StructureRefused("symmetry_unreadable", f"the symmetry is given only by {other[0]}")
    return operations


def _value(block: gemmi.cif.Block, tag: str) -> str | None:
    value = block.find_value(tag)
    return gemmi.cif.as_string(value).strip() or None if value and value not in _UNKNOWN else None


def _first(block: gemmi.cif.Block, tags: Sequence[str]) -> str | None:
    return next((v for tag in tags if (v := _value(block, tag))), None)
