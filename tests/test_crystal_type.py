"""Space groups, crystal lattice types and Pearson symbols, against the table of structure types and other programs."""

from __future__ import annotations

import warnings

import ase.build
import ase.data
import crystals
import numpy as np
import pytest
import spglib

from lattice_census.cell import crystal_type
from lattice_census.cell.canonical import canonicalise
from lattice_census.cell.crystal_type import (
    SYMMETRY_FAILED,
    classify_crystals,
    upright_layer,
    wyckoff_sequence,
)
from lattice_census.cell.lattice_type import classify_lattices
from lattice_census.demo.structure_types import structure_types
from lattice_census.errors import UsageError
from lattice_census.kernels.operations import count_operations
from lattice_census.lattice.bravais import ALL_TYPES, HOLOHEDRY_ORDER, multiplicity, normal_symbol
from lattice_census.model.batch import CrystalBatch
from lattice_census.tolerances import Tolerances

from . import strategies

DEFAULT = Tolerances()


def primitive(crystal):
    """The canonical form of the crystal: primitive, reduced, right-handed."""
    found = canonicalise(strategies.batch([crystal]), DEFAULT)
    assert found.refusals == ()
    batch = found.crystals
    return batch.cells[0], batch.positions, batch.tokens_of(0)


def classified(crystal_list, tolerances=DEFAULT, keys=None):
    batch = strategies.batch(crystal_list)
    lattices = classify_lattices(batch.cells, tolerances, batch.periodicity)
    return lattices, classify_crystals(batch, lattices, tolerances, keys)


def by_spglib(crystal, symprec=0.01):
    """(space group, Pearson symbol counted in the standard cell) by spglib."""
    cell, positions, tokens = crystal
    names = sorted(set(tokens))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        d = spglib.get_symmetry_dataset((cell, positions, [names.index(t) for t in tokens]), symprec=symprec)
    n = d.number
    family = "amothhc"[sum(n > last for last in (2, 15, 74, 142, 167, 194))]
    return n, normal_symbol(family + d.international[0] + str(len(d.std_types)))


# --- the structure types


@pytest.mark.parametrize("form", ["conventional", "primitive", "doubled"])
def test_structure_types(form):
    types, given = structure_types(), list(strategies.type_crystals())
    if form == "doubled":
        given = [strategies.supercell(c, np.diag([2, 1, 1])) for c in given]
    elif form == "primitive":
        rng = np.random.default_rng(3)
        given = [strategies.disguise(rng, primitive(c), max_index=1) for c in given]
    lattices, found = classified([primitive(c) for c in given])
    assert found.failures == () and found.rows.tolist() == list(range(len(types)))
    assert found.numbers.tolist() == [t.space_group for t in types]
    # The table writes oC and mC for a centred face, the IUCr symbol is oS and mS.
    wanted = [normal_symbol(t.pearson) for t in types]
    assert list(found.pearson) == wanted
    assert found.symbols == [p[:2] for p in wanted]
    assert [h or "" for h in found.pearson_hexagonal] == [t.pearson_hexagonal for t in types]
    # A lattice has at least the symmetry of the crystal on it.
    assert (lattices.holohedry_orders >= [HOLOHEDRY_ORDER[s] for s in found.symbols]).all()
    assert not found.symmetry_unsure.any()
    assert lattices.symbols == found.symbols
    assert not found.pseudo_symmetric.any()
    sites = np.diff(found.standard.offsets)
    assert sites.tolist() == [t.sites_primitive * multiplicity(s) for t, s in zip(types, found.symbols, strict=True)]


def test_facts_of_the_trade():
    """Common practice, no source."""
    salt = (strategies.PRIMITIVE["F"] * 5.64, np.array([[0, 0, 0], [0.5, 0.5, 0.5]]), ["Na", "Cl"])
    aluminium = (strategies.PRIMITIVE["F"] * 4.05, np.zeros((1, 3)), ["Al"])
    arsenic = primitive(next(c for c, t in zip(strategies.type_crystals(), structure_types(), strict=True)
                             if t.prototype == "alpha-As"))  # fmt: skip
    lattices, found = classified([salt, aluminium, arsenic])
    assert lattices.symbols == found.symbols == ["cF", "cF", "hR"]
    assert found.group_symbols == ("Fm-3m", "Fm-3m", "R-3m")
    assert found.pearson == ("cF8", "cF4", "hR2")
    assert found.pearson_hexagonal == (None, None, "hR6")
    assert found.wyckoff == ("ba", "a", "c")


# --- pseudo-symmetry and doubt


def test_pseudo_symmetric_where_the_basis_breaks_the_lattice():
    rng = np.random.default_rng(7)
    for symbol in ("cF", "hP", "tI", "oI", "mS", "aP"):
        lattices, found = classified([strategies.random_crystal(rng, symbol, 4) for _ in range(5)])
        assert set(lattices.symbols) == {symbol}
        assert set(found.symbols) == {"aP"} and set(found.numbers.tolist()) == {1}
        assert set(found.pseudo_symmetric.tolist()) == {symbol != "aP"}


def moved(size):
    """Rock salt of two formula units with one site moved by `size` angstrom along an axis."""
    cell, positions, tokens = strategies.supercell(
        (strategies.PRIMITIVE["F"] * 5.64, np.array([[0, 0, 0], [0.5, 0.5, 0.5]]), ["Na", "Cl"]), np.diag([2, 1, 1])
    )
    positions = positions.copy()
    positions[0] += np.array([0.3, 0.5, 0.8]) / np.linalg.norm([0.3, 0.5, 0.8]) * size @ np.linalg.inv(cell)
    return cell, positions, tokens


def test_unsure_between_half_and_twice_the_tolerance():
    lattices, found = classified([moved(s) for s in (0.0, 0.001, 0.012, 0.2)])
    assert found.symmetry_unsure.tolist() == [False, False, True, False]


def test_unsure_agrees_with_three_searches():
    """moyopy measures an operation by its own rule, so that the two may differ close to a limit and nowhere else."""
    rng = np.random.default_rng(11)
    given = []
    for crystal in strategies.type_crystals()[:40]:
        cell, positions, tokens = primitive(crystal)
        noise = rng.normal(size=positions.shape)
        size = 10 ** rng.uniform(-4, -0.5)
        noise *= size / np.linalg.norm(noise, axis=1).max()
        given.append((cell, positions + noise @ np.linalg.inv(cell), tokens))
    _, found = classified(given)
    groups = [classified(given, Tolerances(symmetry_tolerance=s))[1].numbers for s in (0.005, 0.01, 0.02)]
    changes = (groups[0] != groups[1]) | (groups[1] != groups[2])
    assert (changes == found.symmetry_unsure).mean() >= 0.9
    assert changes.any() and not changes.all()


def plain_counts(crystal, limits):
    """Slow twin: operations by running through all matrices with entries -1, 0, 1 and all ways to place one site."""
    cell, positions, tokens = crystal
    metric = cell @ cell.T
    box = np.array(np.meshgrid(*[[-1, 0, 1]] * 9)).reshape(9, -1).T.reshape(-1, 3, 3)
    box = box[np.abs(np.abs(np.linalg.det(box)) - 1) < 1e-9]
    image = box @ metric @ np.swapaxes(box, 1, 2)
    edge = np.sqrt(np.diag(metric))
    new = np.sqrt(np.einsum("nii->ni", image))
    lengths, pairs = np.outer(edge, edge), new[:, :, None] * new[:, None, :]
    turn = np.arccos(np.clip(image / pairs, -1, 1)) - np.arccos(np.clip(metric / lengths, -1, 1))
    off = (np.abs(np.sin(turn)) * np.sqrt((lengths + pairs) / 2)).max(axis=(1, 2))
    part = np.maximum(np.abs(new - edge).max(axis=1), off)
    residuals = []
    for m, lattice in zip(box[part <= limits[-1]], part[part <= limits[-1]], strict=True):
        rare = min(range(len(tokens)), key=lambda i: tokens.count(tokens[i]))
        for target in range(len(tokens)):
            if tokens[target] != tokens[rare]:
                continue
            moved_sites = (positions - positions[rare]) @ m + positions[target]
            shifts = []
            for x, token in zip(moved_sites, tokens, strict=True):
                d = np.array([p - x for p, t in zip(positions, tokens, strict=True) if t == token])
                d = (d - np.round(d)) @ cell
                shifts.append(d[np.argmin((d**2).sum(axis=1))])
            shifts = np.array(shifts)
            if (shifts**2).sum(axis=1).max() > 4 * limits[-1] ** 2:
                continue
            left = np.linalg.norm(shifts - shifts.mean(axis=0), axis=1)
            residuals.append((max(lattice, left.max()), np.sqrt((left**2).mean())))
    possible = sum(r <= limits[-1] and mean <= limits[-1] / 2 for r, mean in residuals)
    return [sum(r <= limit for r, _ in residuals) for limit in limits] + [possible]


def test_count_equals_the_slow_twin():
    rng = np.random.default_rng(13)
    given = []
    for i in (0, 1, 2, 5, 7, 12, 20):
        cell, positions, tokens = primitive(strategies.type_crystals()[i])
        positions = positions + rng.normal(size=positions.shape) * 0.004 @ np.linalg.inv(cell)
        given.append((cell @ (np.eye(3) + rng.normal(size=(3, 3)) * 0.0005), positions, tokens))
    given.append(strategies.random_crystal(rng, "aP", 4))
    batch = strategies.batch(given)
    limits = np.array([0.005, 0.01, 0.02])
    counts, possible = np.zeros((len(batch), 3), np.int64), np.zeros(len(batch), np.int64)
    count_operations(batch.cells, batch.offsets, batch.positions, batch.species, limits, counts, possible)
    assert np.c_[counts, possible].tolist() == [plain_counts(c, limits) for c in given]
    assert (counts[:, 0] < counts[:, 2]).any()
    assert (counts[:, 1] <= possible).all() and (possible < counts[:, 2]).any()


def near_p1(rng, count):
    """Crystals whose operations are broken by about the tolerance, and triclinic ones with and without an inversion
    that is just there or just not."""
    for crystal in strategies.type_crystals()[:count]:
        cell, positions, tokens = primitive(crystal)
        for size in (0.006, 0.01, 0.013, 0.02, 0.05):
            v = rng.normal(size=positions.shape)
            v *= size / np.linalg.norm(v, axis=1, keepdims=True)
            yield cell, positions + v @ np.linalg.inv(cell), tokens
    for i in range(2 * count):
        cell, positions, tokens = strategies.random_crystal(rng, "aP", 1 + i % 5, ("Al", "O"))
        if i % 2:
            positions = np.concatenate([positions, -positions])
            tokens = [*tokens, *tokens]
        v = rng.normal(size=positions.shape)
        v *= 10 ** rng.uniform(-2.5, -1.5) / np.linalg.norm(v, axis=1, keepdims=True)
        crystal = cell, positions + v @ np.linalg.inv(cell), tokens
        if not canonicalise(strategies.batch([crystal]), DEFAULT).refusals:  # two sites may overlap
            yield primitive(crystal)


def check_p1(count):
    """The searches that are left out would have found the same (moyopy)."""
    given = list(near_p1(np.random.default_rng(17), count))
    _, found = classified(given)
    batch = strategies.batch(given)
    counts, possible = crystal_type._counts(batch, DEFAULT.symmetry_tolerance)
    alone = np.flatnonzero(possible == 1)
    assert len(alone) > count
    assert (counts[alone, 1] > 1).any()
    for i in alone.tolist():
        cell, positions, tokens = given[i]
        codes = [batch.tokens.index(t) + 1 for t in tokens]
        one = crystal_type._search(cell, positions, codes, DEFAULT.symmetry_tolerance, False)
        mine = crystal_type._without_symmetry(cell, positions, codes)
        assert (one.number, one.hall_number, one.wyckoff) == (1, 1, mine.wyckoff)
        assert len(one.species) == len(mine.species)
        assert found.numbers[i] == 1


def test_without_possible_operations_there_is_p1():
    check_p1(30)


@pytest.mark.slow
def test_without_possible_operations_there_is_p1_on_a_thousand():
    check_p1(140)


# --- against spglib


def test_elements_of_ase():
    given = []
    for number, state in enumerate(ase.data.reference_states):
        if state is None or state["symmetry"] in ("diatom", "atom"):
            continue
        try:
            atoms = ase.build.bulk(ase.data.chemical_symbols[number])
        except (ValueError, NotImplementedError, KeyError, RuntimeError):
            continue  # Elements for which ase states no basis.
        given.append((np.array(atoms.cell), atoms.get_scaled_positions(), atoms.get_chemical_symbols()))
    assert len(given) > 50
    _, found = classified([primitive(c) for c in given])
    pearson = [h or p for h, p in zip(found.pearson_hexagonal, found.pearson, strict=True)]
    assert list(zip(found.numbers.tolist(), pearson, strict=True)) == [by_spglib(c) for c in given]


def test_crystals_of_the_package_crystals():
    given = []
    for name in sorted(crystals.Crystal.builtins):
        c = crystals.Crystal.from_database(name)
        sites = list(c)
        positions = np.array([a.coords_fractional for a in sites])
        given.append((np.array(c.lattice_vectors), positions, [a.element for a in sites]))
    _, found = classified([primitive(c) for c in given])
    assert found.failures == () and len(found) == len(given) > 50
    for i, crystal in enumerate(given):
        number, pearson = by_spglib(primitive(crystal))
        assert int(found.numbers[i]) == number
        assert (found.pearson_hexagonal[i] or found.pearson[i]) == pearson


def test_disguised_crystals():
    rng = np.random.default_rng(19)
    sources = strategies.type_crystals()
    given = [strategies.disguise(rng, sources[i % len(sources)], max_index=2) for i in range(500)]
    _, found = classified([primitive(c) for c in given])
    types = structure_types()
    for i in range(500):
        t = types[i % len(types)]
        assert int(found.numbers[i]) == t.space_group
        assert found.pearson[i] == normal_symbol(t.pearson)
    for i in range(0, 500, 10):
        number, pearson = by_spglib(given[i])
        assert (int(found.numbers[i]), found.pearson_hexagonal[i] or found.pearson[i]) == (number, pearson)


# --- the standard cell


def test_standard_cell_and_the_way_to_it():
    batch_list = [primitive(c) for c in strategies.type_crystals()]
    _, found = classified(batch_list)
    for k, (cell, positions, tokens) in enumerate(batch_list):
        matrix, shift = found.standard_matrices[k], found.standard_shifts[k]
        np.testing.assert_allclose(matrix, np.round(matrix), atol=1e-6)
        assert round(np.linalg.det(matrix)) == multiplicity(found.symbols[k])
        standard, sites = found.standard.cells[k], found.standard.sites(k)
        selected = matrix @ cell
        np.testing.assert_allclose(selected @ selected.T, standard @ standard.T, rtol=1e-4, atol=2e-3)
        there = found.standard.positions[sites]
        names = found.standard.tokens_of(k)
        for x, token in zip((positions - shift) @ np.linalg.inv(matrix), tokens, strict=True):
            d = np.array([p - x for p, t in zip(there, names, strict=True) if t == token])
            assert np.linalg.norm((d - np.round(d)) @ standard, axis=1).min() < 0.01


def test_mixed_sites_are_species_of_their_own():
    cell, positions = np.eye(3) * 3.0, np.array([[0, 0, 0], [0.5, 0.5, 0.5]])
    _, found = classified([(cell, positions, ["Cu", "Cu0.5Zn0.5"]), (cell * 1.01, positions, ["Cu", "Zn"])])
    assert found.numbers.tolist() == [221, 221] and found.symbols == ["cP", "cP"]
    assert found.standard.tokens_of(0) == ["Cu", "Cu0.5Zn0.5"]


def test_wyckoff_sequence():
    assert wyckoff_sequence(["a", "c", "c", "e", "e", "e", "e"], [0, 1, 1, 3, 3, 5, 5]) == "e2ca"
    assert wyckoff_sequence(["A", "z", "a"], [0, 1, 2]) == "Aza"


# --- columns, keys, failures, layers


def test_rows_of_one_key_share_one_search(monkeypatch):
    calls = []
    search = crystal_type._search
    monkeypatch.setattr(crystal_type, "_search", lambda *a: calls.append(1) or search(*a))
    salt = (strategies.PRIMITIVE["F"] * 5.64, np.array([[0, 0, 0], [0.5, 0.5, 0.5]]), ["Na", "Cl"])
    iron = (strategies.PRIMITIVE["I"] * 2.87, np.zeros((1, 3)), ["Fe"])
    _, found = classified([salt, iron, salt, salt], keys=["x", "y", "x", "x"])
    assert len(calls) == 2
    assert found.numbers.tolist() == [225, 229, 225, 225]
    assert found.frame()["space_group"].to_list() == [225, 229, 225, 225]


def test_a_failure_is_a_row_and_stops_nothing(monkeypatch):
    search = crystal_type._search

    def fail_on_iron(cell, positions, species, tolerance, layer):
        if len(species) == 1:
            raise ValueError("no luck")
        return search(cell, positions, species, tolerance, layer)

    monkeypatch.setattr(crystal_type, "_search", fail_on_iron)
    salt = (strategies.PRIMITIVE["F"] * 5.64, np.array([[0, 0, 0], [0.5, 0.5, 0.5]]), ["Na", "Cl"])
    iron = (strategies.PRIMITIVE["I"] * 2.87, np.zeros((1, 3)), ["Fe"])
    _, found = classified([salt, iron, salt])
    assert found.rows.tolist() == [0, 2]
    ((row, code, message),) = found.failures
    assert (row, code) == (1, SYMMETRY_FAILED) and "1 sites" in message and "no luck" in message


def test_nothing_in_nothing_out():
    _, found = classified([])
    assert len(found) == 0 and found.frame().height == 0


def test_columns_must_agree():
    lattices, _ = classified([])
    batch = strategies.batch([(np.eye(3) * 3, np.zeros((1, 3)), ["Fe"])])
    with pytest.raises(UsageError):
        classify_crystals(batch, lattices, DEFAULT)


def test_layers():
    """Graphene is layer group p6/mmm (80), hexagonal boron nitride p-6m2 (78); values from memory."""
    cell = strategies.cell_from_parameters(2.46, 2.46, 15, 90, 90, 120)
    cell[2, :2] = [0.7, -0.4]
    positions = np.array([[1 / 3, 2 / 3, 0.5], [2 / 3, 1 / 3, 0.5]])
    rng = np.random.default_rng(29)
    turned = cell @ strategies.rotation(rng)
    one = strategies.batch([(turned, positions, ["C", "C"]), (turned, positions, ["B", "N"])])
    batch = CrystalBatch(one.cells, one.offsets, one.positions, one.species, one.tokens, np.array([2, 2], np.uint8))
    lattices = classify_lattices(batch.cells, DEFAULT, batch.periodicity)
    found = classify_crystals(batch, lattices, DEFAULT)
    assert found.numbers.tolist() == [80, 78]
    assert lattices.symbols == found.symbols == ["hp", "hp"]
    assert found.frame()["layer_group"].to_list() == [80, 78]
    assert found.frame()["space_group"].to_list() == [None, None]
    assert found.pearson == (None, None)
    assert not found.symmetry_unsure.any() and not found.pseudo_symmetric.any()


def test_upright_layer_keeps_the_sites():
    rng = np.random.default_rng(31)
    cell, positions, _ = strategies.random_crystal(rng, "aP", 5)
    cell = cell if np.linalg.det(cell) > 0 else -cell
    upright, moved_to = upright_layer(cell, positions)
    a, b = positions @ cell, moved_to @ upright
    np.testing.assert_allclose(np.linalg.norm(a[:, None] - a, axis=-1), np.linalg.norm(b[:, None] - b, axis=-1))
    assert upright[2, 0] == upright[2, 1] == 0.0


def test_every_symbol_of_a_group_is_known():
    for number in range(1, 231):
        symbol, code = crystal_type._space_group(number)
        assert " " not in symbol and ALL_TYPES[code][1].isupper()
    for number in range(1, 81):
        assert ALL_TYPES[crystal_type._layer_group(number)[1]][1].islower()
