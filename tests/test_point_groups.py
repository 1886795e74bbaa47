"""Orders of point groups against gemmi's space groups and moyopy's layer groups."""

from __future__ import annotations

import gemmi
import moyopy
import pytest

from lattice_census.lattice.point_groups import point_group_order


def test_space_groups_against_gemmi():
    for number in range(1, 231):
        operations = gemmi.find_spacegroup_by_number(number).operations()
        assert point_group_order(number) == len(list(operations.sym_ops)), number


def test_layer_groups_by_their_geometric_class():
    orders = {
        "1": 1, "-1": 2, "2": 2, "m": 2, "2/m": 4, "222": 4, "mm2": 4, "mmm": 8, "4": 4, "-4": 4, "4/m": 8, "422": 8,
        "4mm": 8, "-42m": 8, "4/mmm": 16, "3": 3, "-3": 6, "32": 6, "3m": 6, "-3m": 12, "6": 6, "-6": 6, "6/m": 12,
        "622": 12, "6mm": 12, "-6m2": 12, "6/mmm": 24,
    }  # fmt: skip
    for number in range(1, 81):
        group = str(moyopy.LayerGroupType(number).geometric_crystal_class).replace("GeometricCrystalClass.", "")
        known = orders.get(group)
        if known is None:
            pytest.skip(f"moyopy names its classes otherwise: {group}")
        assert point_group_order(number, layer=True) == known, (number, group)


def test_numbers_that_are_none_are_refused():
    for number, layer in ((0, False), (231, False), (81, True)):
        with pytest.raises(ValueError):
            point_group_order(number, layer)
