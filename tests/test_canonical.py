"""The canonical form: one key a crystal whatever it was written as, and the way back to what was given."""

from __future__ import annotations

import time

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.errors import UsageError
from lattice_census.tolerances import GRID, Tolerances
from tests import slow_canonical
from tests.invariants import check_accounting, check_canonical, check_fixed_point
from tests.strategies import (
    LATTICE_TYPES,
    batch,
    cell_from_parameters,
    disguise,
    hermite_matrices,
    mirror,
    primitive_cell,
    random_crystal,
    supercell,
    type_crystals,
    unimodular,
)

TOLERANCES = Tolerances()


def crystals_of_all_types(rng, number):
    """Random crystals on all 14 lattice types in turn, and structure types of the package for the symmetric ones."""
    drawn = [
        random_crystal(rng, LATTICE_TYPES[i % 14], int(rng.integers(1, 9)), ("Si", "O", "Mg")[: 1 + i % 3])
        for i in range(number - len(type_crystals()))
    ]
    return drawn + list(type_crystals())[: number - len(drawn)]


def six_digits(crystal):
    """The crystal as a file of cell parameters and fractions with six digits would give it."""
    cell, positions, tokens = crystal
    edges = np.linalg.norm(cell, axis=1)
    cosines = [cell[i] @ cell[j] / edges[i] / edges[j] for i, j in ((1, 2), (0, 2), (0, 1))]
    written = cell_from_parameters(*np.round(edges, 6), *np.round(np.degrees(np.arccos(cosines)), 6))
    return written, np.round(positions, 6), tokens


def disguises_of(rng, crystals, each):
    out = [disguise(rng, c) for c in crystals for _ in range(each)]
    return out, np.repeat(np.arange(len(crystals)), each)


@pytest.mark.parametrize("each", [2, pytest.param(10, marks=pytest.mark.slow)])
def test_disguises_keep_the_key(each):
    rng = np.random.default_rng(20240501)
    crystals = crystals_of_all_types(rng, 200)
    plain = canonicalise(batch(crystals), TOLERANCES)
    disguised, owner = disguises_of(rng, crystals, each)
    given = batch(disguised)
    result = canonicalise(given, TOLERANCES)
    assert not plain.refusals and not result.refusals
    assert len(set(plain.crystal_key)) == 200
    assert list(result.crystal_key) == [plain.crystal_key[i] for i in owner]
    assert result.residual.max() < 1e-9


def test_invariants_of_plain_and_disguised_crystals():
    rng = np.random.default_rng(7)
    crystals = crystals_of_all_types(rng, 140)
    disguised, _ = disguises_of(rng, crystals, 1)
    for given in (batch(crystals), batch(disguised), batch([six_digits(c) for c in disguised])):
        result = canonicalise(given, TOLERANCES)
        check_canonical(given, result, within=2e-3)
        check_fixed_point(result, canonicalise(result.crystals, TOLERANCES))


def test_six_digits_mostly_keep_the_key():
    """Measured, not promised: keys of files with six decimals (the grades above `key` find the rest)."""
    rng = np.random.default_rng(3)
    crystals = crystals_of_all_types(rng, 200)
    plain = canonicalise(batch(crystals), TOLERANCES)
    disguised, owner = disguises_of(rng, list(crystals), 2)
    result = canonicalise(batch([six_digits(c) for c in disguised]), TOLERANCES)
    kept = np.mean([result.crystal_key[r] == plain.crystal_key[owner[i]] for r, i in enumerate(result.rows)])
    straight = canonicalise(batch([six_digits(c) for c in crystals]), TOLERANCES)
    same = np.mean([straight.crystal_key[r] == plain.crystal_key[i] for r, i in enumerate(straight.rows)])
    assert same > 0.6 and kept > 0.3


def test_order_and_chunks_do_not_matter():
    rng = np.random.default_rng(5)
    crystals = crystals_of_all_types(rng, 100)
    whole = canonicalise(batch(crystals), TOLERANCES).crystal_key
    assert canonicalise(batch(crystals[::-1]), TOLERANCES).crystal_key == whole[::-1]
    assert (
        sum((canonicalise(batch(crystals[i : i + 7]), TOLERANCES).crystal_key for i in range(0, 100, 7)), ()) == whole
    )


def is_achiral_type(space_group):
    """Whether a space group holds an improper operation: it is none of the 65 groups of proper motions alone."""
    import gemmi

    operations = gemmi.find_spacegroup_by_number(space_group).operations()
    return any(op.det_rot() < 0 for op in operations.sym_ops)


def test_mirror_images_by_structure_type():
    """A type whose space group has an improper operation equals its mirror image; the others have two keys.

    Outside source: the operations of the space groups in gemmi.
    """
    from lattice_census.demo.structure_types import structure_types

    types = structure_types()
    keys = canonicalise(batch(list(type_crystals())), TOLERANCES).crystal_key
    mirrored = canonicalise(batch([mirror(c) for c in type_crystals()]), TOLERANCES).crystal_key
    chiral = 0
    for kind, key, other in zip(types, keys, mirrored, strict=True):
        assert (key == other) == is_achiral_type(kind.space_group), kind.prototype
        chiral += key != other
    assert chiral >= 3


def test_mirror_images_of_random_crystals():
    rng = np.random.default_rng(11)
    chiral = [random_crystal(rng, t, 5) for t in LATTICE_TYPES]
    # A centre of inversion at the origin makes a crystal equal to its mirror image.
    achiral = []
    while len(achiral) < 14:
        cell, x, tokens = random_crystal(rng, LATTICE_TYPES[len(achiral)], 3)
        candidate = cell, np.concatenate([x, -x]), tokens + tokens
        if not canonicalise(batch([candidate]), TOLERANCES).refusals:
            achiral.append(candidate)
    for crystals, same in ((chiral, False), (achiral, True)):
        keys = canonicalise(batch(crystals), TOLERANCES).crystal_key
        others = canonicalise(batch([disguise(rng, mirror(c)) for c in crystals]), TOLERANCES).crystal_key
        assert [a == b for a, b in zip(keys, others, strict=True)] == [same] * 14


def test_left_handed_basis_is_not_a_mirror_image():
    rng = np.random.default_rng(12)
    crystals = [random_crystal(rng, t, 4) for t in LATTICE_TYPES]
    right = canonicalise(batch([disguise(rng, c, handed=1) for c in crystals]), TOLERANCES)
    given = batch([disguise(rng, c, handed=-1) for c in crystals])
    left = canonicalise(given, TOLERANCES)
    assert left.crystal_key == right.crystal_key
    assert (np.linalg.det(left.multiplicity_matrix.astype(float)) < 0).all()
    check_canonical(given, left)


def test_superstructures_of_one_parent_keep_apart():
    """Shifts of +0.019 and -0.019 angstrom from one parent: two keys, one approximate translation lattice."""
    rng = np.random.default_rng(13)
    for lattice_type in LATTICE_TYPES:
        parent = random_crystal(rng, lattice_type, 3)
        matrices = hermite_matrices(int(rng.integers(2, 5)))
        matrix = matrices[rng.integers(len(matrices))]
        cell, x, tokens = supercell(parent, matrix)
        index = len(tokens) // 3
        # Along one fixed direction in a chiral parent the two are not equal by symmetry.
        step = np.zeros_like(x)
        step[0] = 0.019 * np.array([0.6, 0.48, 0.64]) @ np.linalg.inv(cell)
        pair = [(cell, x + step, tokens), (cell, x - step, tokens), (cell, x, tokens)]
        given = batch(pair)
        result = canonicalise(given, TOLERANCES)
        assert len(set(result.crystal_key)) == 3
        assert result.supercell_index.tolist() == [1, 1, index]
        assert result.pseudo_index.tolist() == [index, index, 1]
        assert (result.pseudo_residual[:2] > 0.005).all() and (result.pseudo_residual[:2] < 0.0191).all()
        check_canonical(given, result)


def test_overlapping_sites_are_named():
    cell = cell_from_parameters(4, 5, 6, 80, 90, 100)
    near = np.array([[0.1, 0.2, 0.3], [0.6, 0.5, 0.5], [0.1, 0.2, 0.35]])
    across = np.array([[0.02, 0.5, 0.5], [0.5, 0.5, 0.5], [0.96, 0.5, 0.5]])
    given = batch([(cell, near, ["C"] * 3), (cell, across, ["C", "N", "O"]), (cell, near[:2], ["C", "N"])])
    result = canonicalise(given, TOLERANCES)
    assert result.rows.tolist() == [2]
    assert [(row, r.reason, r.message) for row, r in result.refusals] == [
        (0, "sites_overlap", "sites 1 and 3 are 0.300 angstrom apart"),
        (1, "sites_overlap", "sites 1 and 3 are 0.240 angstrom apart"),
    ]


def test_a_site_that_meets_its_own_image_is_refused():
    """Lattice vectors of 0.4 angstrom that the given basis hides."""
    cell = np.array([[4.0, 0, 0], [4.0, 0.4, 0], [1.0, 0.1, 5.0]])
    result = canonicalise(batch([(cell, np.array([[0.3, 0.3, 0.3], [0.5, 0.3, 0.8]]), ["C", "C"])]), TOLERANCES)
    assert [r.message for _, r in result.refusals] == ["site 1 and its own periodic image are 0.400 angstrom apart"]


def test_bad_records_are_refused_and_the_others_stay():
    good = random_crystal(np.random.default_rng(14), "aP", 3)
    x = np.array([[0.0, 0, 0]])
    flat = np.array([[4.0, 0, 0], [0, 4.0, 0], [1e-9, 4.0, 1e-9]])
    crystals = [
        good,
        (np.zeros((3, 3)), x, ["C"]),
        (np.array([[1.0, 0, 0], [0, 1, 0], [1, 1, 0]]), x, ["C"]),
        (np.full((3, 3), np.nan), x, ["C"]),
        (np.array([[np.inf, 0, 0], [0, 1, 0], [0, 0, 1]]), x, ["C"]),
        (flat, x, ["C"]),
        (np.eye(3) * 4, x * np.nan, ["C"]),
        (np.eye(3) * 4, x + 1e15, ["C"]),
        (np.eye(3) * 4, np.zeros((0, 3)), []),
        good,
    ]
    given = batch(crystals)
    result = canonicalise(given, TOLERANCES)
    check_accounting(given, result)
    assert result.rows.tolist() == [0, 9]
    assert result.crystal_key[0] == result.crystal_key[1] == canonicalise(batch([good]), TOLERANCES).crystal_key[0]
    reasons = [r.reason for _, r in result.refusals]
    assert reasons == ["cell_zero"] * 2 + ["cell_absurd"] * 3 + ["coordinates_nonfinite"] * 2 + ["sites_missing"]


def test_empty_batch():
    result = canonicalise(batch([]), TOLERANCES)
    assert len(result) == 0 and result.crystal_key == () and result.refusals == ()


def test_contradicting_tolerances_are_refused():
    with pytest.raises(UsageError):
        canonicalise(batch([]), Tolerances(primitive_tolerance=0.2))


@pytest.mark.parametrize("number", [40, pytest.param(400, marks=pytest.mark.slow)])
def test_descriptions_agree_with_the_plain_twin(number):
    """The smallest description by forming them all; the twin starts from the canonical crystal in another basis."""
    rng = np.random.default_rng(301)
    crystals = crystals_of_all_types(rng, number + 84)[-number:]
    result = canonicalise(batch(crystals), TOLERANCES)
    for i in range(len(result)):
        x = result.crystals.positions[result.crystals.sites(i)]
        if len(x) > 12:
            continue
        cell, tokens = result.crystals.cells[i], result.crystals.tokens_of(i)
        order = rng.permutation(len(x))
        numbers, sites = slow_canonical.smallest_description(cell, x[order], [tokens[k] for k in order])
        size = np.cbrt(abs(np.linalg.det(cell)) / len(x))
        metric = (cell @ cell.T / size**2)[[0, 1, 2, 1, 0, 0], [0, 1, 2, 2, 2, 1]]
        assert slow_canonical.grid(metric).tolist() == list(numbers)
        assert (slow_canonical.grid(x) % GRID).tolist() == [list(s[1:]) for s in sites]


def test_overlaps_agree_with_the_plain_twin():
    """Random sites close to the limit, in skewed bases of cells with edges near it too."""
    rng = np.random.default_rng(302)
    crystals, wanted = [], []
    for i in range(150):
        cell = primitive_cell(rng, LATTICE_TYPES[i % 14]) * rng.uniform(0.1, 0.4)
        x = rng.random((int(rng.integers(1, 5)), 3))
        wanted.append(slow_canonical.closest_pair(cell, x, TOLERANCES.overlap_distance))
        m = unimodular(rng)
        crystals.append((m @ cell, x @ np.linalg.inv(m) + rng.integers(-2, 3, x.shape), ["C"] * len(x)))
    result = canonicalise(batch(crystals), TOLERANCES)
    refused = dict(result.refusals)
    assert 30 < len(refused) < 140
    for i, pair in enumerate(wanted):
        assert (i in refused) == (pair is not None)
        if pair is not None:
            a, b, r = pair
            named = f"sites {a + 1} and {b + 1} are" if a != b else "site 1 and its own periodic image are"
            assert refused[i].message == f"{named} {r:.3f} angstrom apart"


def test_crystals_of_lattices_close_to_a_higher_symmetry():
    """Double precision, lattices that miss a higher type by 1e-7 to 1e-4: one key each, and a fixed point."""
    rng = np.random.default_rng(303)
    crystals = []
    for i in range(140):
        cell, x, tokens = random_crystal(rng, LATTICE_TYPES[i % 14], 3)
        noise = 10 ** rng.uniform(-7, -4)
        crystals.append((cell @ (np.eye(3) + noise * rng.uniform(-1, 1, (3, 3))), x, tokens))
    plain = canonicalise(batch(crystals), TOLERANCES)
    disguised, owner = disguises_of(rng, crystals, 4)
    other = canonicalise(batch(disguised), TOLERANCES)
    assert not other.refusals
    assert list(other.crystal_key) == [plain.crystal_key[i] for i in owner]
    check_fixed_point(other, canonicalise(other.crystals, TOLERANCES))


def test_large_symmetric_crystals_take_no_more_than_moments():
    """Many sites and many rotations at once: 48 and 1,000 sites in cubic lattices (seconds allowed, not minutes)."""
    rng = np.random.default_rng(304)
    n = 10
    grid = np.stack(np.meshgrid(*[np.arange(n) / n] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    cell = np.eye(3) * 3.0 * n
    noisy = grid + rng.uniform(-0.01, 0.01, grid.shape)
    tokens = ["Si"] * n**3
    start = time.perf_counter()
    given = batch([(cell, noisy, tokens), (cell, grid[1:], tokens[1:]), (cell, noisy[:48], tokens[:48])])
    result = canonicalise(given, TOLERANCES)
    assert time.perf_counter() - start < 20
    assert len(result) == 3
    assert canonicalise(result.crystals, TOLERANCES).crystal_key == result.crystal_key
