"""The canonical form of layers: one key whatever cell, vacuum, tilt, side and place along the normal came in."""

from __future__ import annotations

import numpy as np
import pytest
from ase.build import fcc111, graphene, mx2

from lattice_census.cell.canonical import canonicalise
from lattice_census.cell.crystal_type import classify_crystals
from lattice_census.cell.lattice_type import classify_lattices
from lattice_census.lattice.layer import FRAME, heights_of, is_plane_reduced, plane_minima
from lattice_census.model.batch import CrystalBatch
from lattice_census.readers.layers import oriented_cell
from lattice_census.tolerances import Tolerances

from .invariants import check_canonical, check_fixed_point
from .slow_layers import slow_key
from .strategies import (
    LAYER_TYPES,
    batch,
    disguise_layer,
    layers,
    plane_cell,
    plane_matrix,
    random_crystal,
    random_layer,
    rotation,
    supercell,
    upright,
)

TOLERANCES = Tolerances()


def key(crystal) -> str:
    result = canonicalise(layers([crystal]), TOLERANCES)
    assert not result.refusals
    return result.crystal_key[0]


def from_atoms(atoms) -> tuple:
    return np.array(atoms.cell), atoms.get_scaled_positions(wrap=False), atoms.get_chemical_symbols()


def built(name: str) -> tuple:
    """Layers as ase builds them (ase.build, LGPL): their vacuum and their flags of periodicity are taken off here."""
    if name == "graphene":
        return from_atoms(graphene(vacuum=6.0))
    if name == "MoS2":
        return from_atoms(mx2("MoS2", "2H", 3.18, 3.19, vacuum=8.0))
    if name == "WTe2-1T":
        return from_atoms(mx2("WTe2", "1T", 3.5, 3.6, vacuum=8.0))
    atoms = fcc111("Al", (1, 1, 3), a=4.05, vacuum=7.0)
    return from_atoms(atoms)


def janus() -> tuple:
    """MoSSe: 2H MoS2 with one side of selenium, nearer by nothing; three-fold axis and mirrors along it."""
    plane = 3.25 * np.array([[1, 0], [-0.5, np.sqrt(0.75)]])
    place = np.array([[0, 0, 0.0], [*((plane[0] * 2 + plane[1]) / 3), 1.53], [*((plane[0] * 2 + plane[1]) / 3), -1.70]])
    return *upright(plane, place), ["Mo", "S", "Se"]


def flipped(crystal) -> tuple:
    """Turned by 180 degrees about an in-plane axis."""
    cell, positions, tokens = crystal
    return cell @ np.diag([1.0, -1.0, -1.0]), positions, tokens


def mirrored(crystal) -> tuple:
    cell, positions, tokens = crystal
    return cell @ np.diag([1.0, 1.0, -1.0]), positions, tokens


@pytest.mark.parametrize("number", [20, pytest.param(200, marks=pytest.mark.slow)])
def test_every_disguise_of_a_layer_has_its_key(number):
    """200 disguises of 20 layers of the five plane lattices: 20 keys, each recovered from its canonical form."""
    rng = np.random.default_rng(701)
    plain = [random_layer(rng, LAYER_TYPES[i % 5], int(rng.integers(1, 7))) for i in range(number)]
    given = layers([disguise_layer(rng, layer) for layer in plain for _ in range(10)])
    result = canonicalise(given, TOLERANCES)
    check_canonical(given, result, within=1e-9)
    keys = np.array(result.crystal_key).reshape(number, 10)
    assert (keys == keys[:, :1]).all()
    assert len(set(keys[:, 0])) == number
    assert (result.supercell_index > 1).any() and (np.linalg.det(result.multiplicity_matrix) < 0).any()
    check_fixed_point(result, canonicalise(result.crystals, TOLERANCES))
    assert classify_lattices(result.crystals.cells, TOLERANCES, result.crystals.periodicity).symbols == [
        LAYER_TYPES[i // 10 % 5] for i in range(10 * number)
    ]


def test_keys_part_layers_as_the_plain_twin_does():
    """A twin that shares nothing with the package (tests/slow_layers.py) calls the same layers equal."""
    rng = np.random.default_rng(702)
    crystals = []
    for i in range(6):
        one = random_layer(rng, LAYER_TYPES[i % 5], 2 + i % 2, ("Si",) if i % 2 else ("Si", "O"))
        cell, positions, tokens = one
        moved = positions.copy()
        moved[0, 2] += 0.05
        crystals += [one, disguise_layer(rng, one, 1), mirrored(one), (cell, moved, tokens)]
    crystals += [built("graphene"), janus(), flipped(janus()), mirrored(janus())]
    ours = canonicalise(layers(crystals), TOLERANCES).crystal_key
    twin = [slow_key(*crystal) for crystal in crystals]
    same = [[a == b for b in ours] for a in ours]
    assert same == [[a == b for b in twin] for a in twin]


@pytest.mark.parametrize("name", ["graphene", "MoS2", "WTe2-1T", "Al(111)"])
def test_vacuum_tilt_side_and_place_do_not_count(name):
    crystal = built(name)
    cell, positions, tokens = crystal
    keys = {key(crystal), key(flipped(crystal)), key(mirrored(crystal))}
    for factor, tilt in ((3.0, 0.0), (1.7, 0.31), (1.0, -0.6)):
        place = positions @ cell
        other = cell.copy()
        other[2] = cell[2] * factor + tilt * (cell[0] + 0.5 * cell[1])
        for along in (0.0, 0.37, 0.98):
            x = place @ np.linalg.inv(other) + [0, 0, along]
            keys.add(key((other, x, tokens)))
            keys.add(key((other, x - np.floor(x), tokens)))
    assert len(keys) == 1


def test_a_layer_is_no_bulk_crystal():
    cell, positions, tokens = built("graphene")
    both = batch([(cell, positions, tokens)] * 2)
    mixed = CrystalBatch(
        both.cells, both.offsets, both.positions, both.species, both.tokens, np.array([2, 3], np.uint8)
    )
    result = canonicalise(mixed, TOLERANCES)
    assert result.crystal_key[0] != result.crystal_key[1]
    assert result.crystals.cells[0, 2, 2] == FRAME != result.crystals.cells[1, 2, 2]


def test_bulk_crystals_do_not_notice_layers_beside_them():
    rng = np.random.default_rng(703)
    bulk = [random_crystal(rng, "oP", 3) for _ in range(5)]
    alone = canonicalise(batch(bulk), TOLERANCES)
    one = batch([*bulk[:2], built("MoS2"), *bulk[2:]])
    mixed = CrystalBatch(
        one.cells, one.offsets, one.positions, one.species, one.tokens, np.array([3, 3, 2, 3, 3, 3], np.uint8)
    )
    result = canonicalise(mixed, TOLERANCES)
    assert [k for i, k in enumerate(result.crystal_key) if i != 2] == list(alone.crystal_key)


def test_stackings_are_two():
    """Two graphene layers on top of each other (AA), and moved by a bond (AB)."""
    cell, _, _ = built("graphene")
    plane = cell[:2, :2]
    one = np.array([[1 / 3, 2 / 3], [2 / 3, 1 / 3]])
    keys = {}
    for name, move in (("AA", 0.0), ("AB", 1 / 3), ("AC", 2 / 3)):
        flat = np.concatenate([one, one + np.array([move, -move])]) @ plane
        place = np.column_stack([flat, [0, 0, 3.35, 3.35]])
        keys[name] = key((*upright(plane, place), ["C"] * 4))
    assert keys["AA"] != keys["AB"] == keys["AC"]


def test_a_janus_layer_and_its_other_side_are_one():
    """No operation of MoSSe turns it over, but a rotation does; it has mirror planes, so its mirror image is itself."""
    assert len({key(janus()), key(flipped(janus())), key(mirrored(janus()))}) == 1
    cell, positions, tokens = janus()
    swapped = (cell, positions, ["Mo", "Se", "S"])
    assert key(swapped) != key(janus())


def test_a_chiral_layer_and_its_mirror_image_have_two_keys():
    rng = np.random.default_rng(704)
    layer = random_layer(rng, "mp", 4)
    assert key(layer) == key(flipped(layer)) != key(mirrored(layer)) == key(mirrored(flipped(layer)))


def test_near_misses_have_other_keys():
    cell, positions, tokens = built("MoS2")
    longer = cell.copy()
    longer[0] *= 1.02
    thicker = positions.copy()
    thicker[1, 2] += 0.6 / np.linalg.norm(cell[2])
    assert len({key((cell, positions, tokens)), key((longer, positions, tokens)), key((cell, thicker, tokens))}) == 3


def test_heights_without_a_clear_gap_are_refused():
    """What is above what cannot be told: two planes half a cell apart, sites over more than one third row, slabs over
    500 angstrom."""
    cell = np.diag([4.0, 5.0, 12.0])

    def reasons(cell, heights):
        x = np.zeros((len(heights), 3))
        x[:, 2] = heights
        return [r.reason for _, r in canonicalise(layers([(cell, x, ["C"] * len(heights))]), TOLERANCES).refusals]

    assert reasons(cell, [0.0, 0.5]) == ["layer_unclear"]
    assert reasons(cell, [0.0, 0.46]) == ["layer_unclear"]
    assert reasons(cell, [0.0, 0.45]) == []
    assert reasons(cell, [0.1, 1.2]) == ["layer_unclear"]
    assert reasons(cell, [0.9, 1.2]) == []
    assert reasons(np.diag([4.0, 5.0, 1500.0]), [0.0, 0.34]) == ["layer_unclear"]
    assert reasons(np.diag([4.0, 5.0, 1500.0]), [0.0, 0.33]) == []
    assert reasons(np.diag([4.0, 5.0, 1.0]), [0.7]) == []


def test_bad_layers_are_refused_and_the_others_stay():
    good = built("MoS2")
    x = np.array([[0.0, 0, 0]])
    crystals = [
        good,
        (np.zeros((3, 3)), x, ["C"]),
        (np.array([[1.0, 0, 0], [2, 0, 0], [0, 0, 5]]), x, ["C"]),
        (np.array([[3.0, 0, 0], [0, 3, 0], [1, 1, 0]]), x, ["C"]),
        (np.full((3, 3), np.nan), x, ["C"]),
        (np.eye(3) * 4, x * np.nan, ["C"]),
        (np.eye(3) * 4, x + np.array([0, 0, 1e15]), ["C"]),
        (np.eye(3) * 4, np.zeros((0, 3)), []),
        (np.eye(3) * 9, np.array([[0, 0, 0], [0, 0, 0.01]]), ["C", "C"]),
        good,
    ]
    given = layers(crystals)
    result = canonicalise(given, TOLERANCES)
    assert result.rows.tolist() == [0, 9] and result.crystal_key[0] == result.crystal_key[1]
    reasons = [r.reason for _, r in result.refusals]
    assert reasons == ["cell_zero"] * 3 + ["cell_absurd"] + ["coordinates_nonfinite"] * 2 + [
        "sites_missing", "sites_overlap",
    ]  # fmt: skip


def test_a_layer_without_a_third_vector_is_read_as_it_stands():
    """The reader makes a third row that leaves more room above the layer than there is inside it."""
    cell = [4.0, 0, 0, 0, 5, 0, 0, 0, 0]
    flat = [0.0, 0, 0, 1, 1, 14]
    rows, periodicity = oriented_cell(cell, (True, True, False), flat)
    made = np.array(rows).reshape(3, 3)
    place = np.array(flat).reshape(2, 3)
    tall = np.diag([4.0, 5, 60])
    assert periodicity == 2
    assert key((made, place @ np.linalg.inv(made), ["C", "C"])) == key((tall, place @ np.linalg.inv(tall), ["C", "C"]))


def test_fewer_than_two_periods_are_refused():
    one = batch([built("graphene")])
    chain = CrystalBatch(one.cells, one.offsets, one.positions, one.species, one.tokens, np.array([1], np.uint8))
    result = canonicalise(chain, TOLERANCES)
    assert [r.reason for _, r in result.refusals] == ["periodicity_unsupported"]


def test_approximate_translations_of_a_layer_lie_in_its_plane():
    """A rippled two-fold cell of one plane: the heights, 0.02 apart, are averaged over; nothing along the normal is."""
    plane = np.diag([3.0, 4.0])
    cell, positions = upright(np.diag([6.0, 4.0]), np.array([[0, 0, 0.0], [3.0, 0, 0.02]]))
    result = canonicalise(layers([(cell, positions, ["Si", "Si"])]), TOLERANCES)
    assert result.supercell_index.tolist() == [1] and result.pseudo_index.tolist() == [2]
    assert (result.pseudo_matrix[0, 2] == [0, 0, 1]).all()
    flat = upright(np.diag([6.0, 4.0]), np.array([[0, 0, 0.0], [3.0, 0, 0.0]]))
    assert key((*flat, ["Si", "Si"])) == key((*upright(plane, np.zeros((1, 3))), ["Si"]))


def test_layer_groups_against_spglib():
    """Of layers with symmetry, in any disguise (spglib.get_symmetry_layerdataset; ours is moyopy)."""
    import spglib

    rng = np.random.default_rng(705)
    crystals = [built(n) for n in ("graphene", "MoS2", "WTe2-1T", "Al(111)")] + [janus()]
    for t in LAYER_TYPES:
        crystals.append((*upright(plane_cell(rng, t), np.zeros((1, 3))), ["Fe"]))
    given = layers([disguise_layer(rng, c, 4) for c in crystals])
    result = canonicalise(given, TOLERANCES)
    kinds = classify_lattices(result.crystals.cells, TOLERANCES, result.crystals.periodicity)
    found = classify_crystals(result.crystals, kinds, TOLERANCES)
    for i, (cell, positions, tokens) in enumerate(crystals):
        numbers = [sorted(set(tokens)).index(t) for t in tokens]
        assert spglib.get_symmetry_layerdataset((cell, positions, numbers), 2, symprec=0.01).number == found.numbers[i]
    assert kinds.symbols == ["hp"] * 5 + list(LAYER_TYPES)
    # The way to the standard cell holds for the cell that came, whose third row is the frame.
    for i in range(len(found)):
        x = result.crystals.positions[result.crystals.sites(i)]
        moved = (x - found.standard_shifts[i]) @ np.linalg.inv(found.standard_matrices[i])
        standard = found.standard.positions[found.standard.sites(i)]
        tokens = found.standard.tokens_of(i)
        for m, t in zip(moved, result.crystals.tokens_of(i), strict=True):
            gap = standard - m
            gap[:, :2] -= np.rint(gap[:, :2])
            near = np.linalg.norm(gap @ found.standard.cells[i], axis=1).argmin()
            assert np.linalg.norm(gap[near] @ found.standard.cells[i]) < 0.02 and tokens[near] == t


def test_plane_minima_against_trying():
    rng = np.random.default_rng(706)
    cells, wanted = [], []
    for i in range(100):
        cell = np.zeros((3, 3))
        cell[:2, :2] = plane_cell(rng, LAYER_TYPES[i % 5])
        cell[2, 2] = 9.0
        short = [np.linalg.norm(n @ cell[:2]) for n in ([1, 0], [0, 1], [1, 1], [1, -1], [2, 1], [1, 2])]
        wanted.append(sorted(short)[:2])
        cells.append((plane_matrix(rng, 1) @ cell) @ rotation(rng))
    np.testing.assert_allclose(plane_minima(np.array(cells)), wanted, rtol=1e-10)


def test_the_predicate_of_a_reduced_plane_can_say_no():
    good = np.array([[3.0, 0, 0], [-1, 4, 0], [0, 0, FRAME]])
    bad = [
        good[[1, 0, 2]],
        good * [[1], [-1], [1]],
        np.array([[3.0, 0, 0], [-1.6, 4, 0], [0, 0, FRAME]]),
        np.array([[3.0, 0, 0], [-1, 4, 0.1], [0, 0, FRAME]]),
        good * [[1], [1], [-1]],
    ]
    assert is_plane_reduced(np.array([good, *bad]), np.full(6, 1e-6)).tolist() == [True] + [False] * 5


def test_heights_are_read_from_the_file_as_it_stands():
    """Equation of `heights_of`: the sites move by whole third rows and nothing else."""
    rng = np.random.default_rng(707)
    given = layers([disguise_layer(rng, random_layer(rng, "mp", 5)) for _ in range(30)])
    found = heights_of(given)
    assert (found.outcome == 0).all() and found.turns.any()
    for i in range(len(given)):
        s = given.sites(i)
        moved = given.positions[s] - found.turns[s][:, None] * [0, 0, 1]
        np.testing.assert_allclose(moved @ given.cells[i], found.positions[s] @ found.cells[i], atol=1e-9)
        unit = found.cells[i, 2] / FRAME
        assert abs(unit @ given.cells[i, 0]) < 1e-9 > abs(unit @ given.cells[i, 1])
        assert unit @ given.cells[i, 2] > 0
        assert found.thickness[i] <= 3.0 + 1e-9


def test_a_supercell_of_a_layer_is_the_layer():
    layer = built("WTe2-1T")
    assert key(supercell(layer, np.diag([3, 2, 1]))) == key(layer)
    assert key(supercell(layer, [[2, 1, 0], [0, 4, 0], [0, 0, -1]])) == key(layer)
