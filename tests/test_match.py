"""The matcher: against its slow twin, the same both ways, and every witness audited."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from lattice_census.cell.canonical import CanonicalBatch, canonicalise
from lattice_census.grouping.audit import Claim, Given, audit
from lattice_census.grouping.preparation import prepare, translation_groups
from lattice_census.grouping.verification import match, verify
from lattice_census.grouping.window import Window, near_window
from lattice_census.grouping.witness import witnesses
from lattice_census.model.batch import batch_from_lists
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .slow_match import slow_match
from .test_candidates import canonical

T = Tolerances()
WINDOW = near_window(T)


def noisy_relatives(rng: np.random.Generator, lattice_type: str, indices=(1, 1, 1), noise=0.03, strain=0.006):
    sites = int(rng.integers(1, 5))
    base = draw.random_crystal(rng, lattice_type, sites, ("Si",) if rng.random() < 0.5 else ("Si", "O"))
    out = []
    for index in indices:
        matrices = draw.hermite_matrices(index)
        larger = draw.supercell(base, matrices[rng.integers(len(matrices))])
        out.append(draw.disguise(rng, larger, 1, noise=noise, strain=strain))
    return out


def compare_with_twin(crystals, largest_index):
    found = canonical(crystals)
    pairs = np.array(list(itertools.combinations(range(len(found)), 2)))
    got = verify(prepare(draw.batch(found), WINDOW), pairs, WINDOW)
    matched = 0
    for i, (a, b) in enumerate(pairs.tolist()):
        expected = slow_match(found[a], found[b], WINDOW.shifts, WINDOW.strains, largest_index)
        assert got.grade[i] == (3 if expected is None else expected.grade)
        if expected is not None:
            matched += 1
            assert abs(got.largest_shift[i] - expected.shift) < 2e-9
            assert abs(got.rms_shift[i] - expected.rms) < 1e-8
            assert abs(got.strain[i] - expected.strain) < 2e-9
            assert abs(got.shape_strain[i] - expected.shape_strain) < 2e-9
            assert got.improper[i] == (not expected.proper)
    return matched


def test_equals_the_slow_twin():
    matched = 0
    for seed in range(14):
        rng = np.random.default_rng(seed)
        matched += compare_with_twin(noisy_relatives(rng, draw.LATTICE_TYPES[seed % 14]), 1)
    assert matched > 30


@pytest.mark.slow
def test_equals_the_slow_twin_in_larger_common_cells():
    matched = 0
    for seed in range(100, 160):
        rng = np.random.default_rng(seed)
        matched += compare_with_twin(noisy_relatives(rng, draw.LATTICE_TYPES[seed % 14], (1, 1, 2, 2)), 2)
    assert matched > 200


def test_equals_the_slow_twin_where_the_nearest_site_is_not_enough():
    """Sites closer than four times the window: the assignment decides. Two split sites 0.25 apart in each crystal."""
    matched = 0
    for seed in range(12):
        rng = np.random.default_rng(200 + seed)
        cell, positions, tokens = draw.random_crystal(rng, "aP", 3, ("Si", "O"))
        split = positions[0] + np.array([0.25, 0.0, 0.0]) @ np.linalg.inv(cell)
        base = (draw.reduced(cell), None, [*tokens, tokens[0]])
        placed = np.vstack([positions, split]) @ cell @ np.linalg.inv(base[0])
        crystals = []
        for _ in range(2):
            v = rng.uniform(-0.04, 0.04, (4, 3))
            crystals.append((base[0], placed + v @ np.linalg.inv(base[0]), base[2]))
        got = match(draw.batch(crystals), T)
        expected = slow_match(*crystals, WINDOW.shifts, WINDOW.strains)
        assert got.grade[0] == (3 if expected is None else expected.grade)
        if expected is not None:
            matched += 1
            assert abs(got.largest_shift[0] - expected.shift) < 1e-8
    assert matched > 4


def test_noisy_double_and_triple_cells_meet_without_the_plain_cell():
    rng = np.random.default_rng(41)
    for lattice_type in draw.LATTICE_TYPES:
        doubled, tripled = noisy_relatives(rng, lattice_type, (2, 3), noise=0.02, strain=0.002)
        found = canonical([doubled, tripled])
        got = match(draw.batch(found), T)
        assert got.grade[0] <= 1
        dets = (abs(round(np.linalg.det(got.p_matrix[0]))), abs(round(np.linalg.det(got.q_matrix[0]))))
        assert dets == (3, 2)


def test_same_both_ways():
    check_same_both_ways(range(300, 320))


@pytest.mark.slow
def test_same_both_ways_on_a_thousand_pairs():
    assert check_same_both_ways(range(320, 420)) >= 1000


def check_same_both_ways(seeds) -> int:
    count = 0
    for seed in seeds:
        rng = np.random.default_rng(seed)
        found = canonical(noisy_relatives(rng, draw.LATTICE_TYPES[seed % 14], (1, 1, 2, 3, 1)))
        prepared = prepare(draw.batch(found), WINDOW)
        pairs = np.array(list(itertools.combinations(range(len(found)), 2)))
        one, two = verify(prepared, pairs, WINDOW), verify(prepared, pairs[:, ::-1], WINDOW)
        for name in ("grade", "improper", "mirrored", "proper_grade"):
            assert (getattr(one, name) == getattr(two, name)).all()
        for name in ("strain", "shape_strain", "largest_shift", "rms_shift", "volume_ratio"):
            assert np.nanmax(np.abs(getattr(one, name) - getattr(two, name)), initial=0.0) < 1e-9
        assert (one.p_matrix == two.q_matrix).all()
        count += len(pairs)
    return count


def given_of(batch, result: CanonicalBatch, i: int) -> Given:
    """Crystal i as it came, from the batch that was canonicalised."""
    row = int(result.rows[i])
    part = slice(int(result.given_offsets[i]), int(result.given_offsets[i + 1]))
    return Given(
        batch.cells[row], batch.positions[batch.sites(row)], batch.tokens_of(row), result.multiplicity_matrix[i],
        result.rotation[i], result.origin[i], result.site_map[part].astype(np.int64),
        result.site_shift[part].astype(np.int64), float(result.residual[i]),
    )  # fmt: skip


def claims(batch, result: CanonicalBatch):
    """All matches among the crystals of a canonical batch with their claims."""
    prepared = prepare(result.crystals, WINDOW)
    pairs = np.array(list(itertools.permutations(range(len(result)), 2)))
    got = verify(prepared, pairs, WINDOW)
    got = got.take(got.grade < 3)
    found = witnesses(prepared, got, WINDOW)
    for i in range(len(got)):
        pairing = found.pairing[found.offsets[i] : found.offsets[i + 1]]
        yield got.pairs[i], Claim(
            got.p_matrix[i], got.q_matrix[i], found.orthogonal[i], got.shift[i], pairing, float(got.strain[i]),
            float(got.shape_strain[i]), float(got.largest_shift[i]), float(got.rms_shift[i]),
            float(got.volume_ratio[i]), bool(got.improper[i]),
        )  # fmt: skip


def test_every_witness_passes_the_audit():
    count = 0
    for seed in range(500, 520):
        rng = np.random.default_rng(seed)
        crystals = noisy_relatives(rng, draw.LATTICE_TYPES[seed % 14], (1, 2, 3), noise=0.02, strain=0.002)
        crystals.append(draw.mirror(crystals[0]))
        crystals.append(draw.disguise(rng, crystals[1], 3))
        batch = draw.batch(crystals)
        result = canonicalise(batch, T)
        for (a, b), claim in claims(batch, result):
            assert audit(given_of(batch, result, a), given_of(batch, result, b), claim) == []
            count += 1
    assert count > 300


def test_the_audit_sees_what_is_wrong():
    rng = np.random.default_rng(43)
    base = draw.random_crystal(rng, "aP", 4)
    batch = draw.batch([draw.disguise(rng, base, 2, noise=0.01), draw.disguise(rng, base, 1, noise=0.01)])
    result = canonicalise(batch, T)
    (a, b), claim = next(claims(batch, result))
    first, second = given_of(batch, result, a), given_of(batch, result, b)
    assert audit(first, second, claim) == []

    def broken(**changes) -> list[str]:
        return audit(first, second, Claim(**{**{n: getattr(claim, n) for n in Claim.__slots__}, **changes}))

    def said(words: str, failures: list[str]) -> bool:
        return any(words in f for f in failures)

    assert said("strain", broken(strain=claim.strain + 1e-5))
    assert said("largest shift", broken(largest_shift=claim.largest_shift + 1e-3))
    assert said("mean shift", broken(shift=claim.shift + np.array([0.01, 0.0, 0.0])))
    assert said("one to one", broken(pairing=np.zeros_like(claim.pairing)))
    assert said("species", broken(pairing=np.roll(claim.pairing, 1)))
    assert said("orthogonal", broken(orthogonal=claim.orthogonal + 0.01))
    assert said("handedness", broken(improper=not claim.improper))
    assert said("sites", broken(p_matrix=2 * np.eye(3, dtype=int)))
    wrong = Given(**{**{n: getattr(first, n) for n in Given.__slots__}, "origin": first.origin + 0.1})
    assert audit(wrong, second, claim)


def test_groups_of_translations_are_all_found():
    """Inside the halves of a cell (7 of them) lie 7 groups of order 2, 7 of order 4 and 1 of order 8."""
    halves = {(420 * i, 420 * j, 420 * k) for i, j, k in itertools.product((0, 1), repeat=3)} - {(0, 0, 0)}
    orders = [len(g) for g in translation_groups(halves, 8)]
    assert [orders.count(n) for n in (2, 4, 8)] == [7, 7, 1]
    assert [len(g) for g in translation_groups({(280, 0, 0), (560, 0, 0)}, 3)] == [3]
    assert translation_groups({(280, 0, 0)}, 3) == []  # a translation without its double is no group


def test_a_grade_is_not_lost_to_another_setting_of_the_axes():
    """A noisy tetragonal copy with c/a 1.013: another setting may have a smaller shift, at a strain beyond `near`."""
    a = 4.0
    cell = np.diag([a, a, a * 1.013])
    positions = np.array([[0, 0, 0], [0.5, 0.5, 0.5]])
    kept = 0
    for seed in range(30):
        rng = np.random.default_rng(600 + seed)
        noise = rng.uniform(-0.02, 0.02, (2, 2, 3)) @ np.linalg.inv(cell)
        batch = batch_from_lists([cell, cell], [positions + noise[0], positions + noise[1]], [["Cs", "Cl"]] * 2)
        kept += match(batch, T).grade[0] <= 1
    assert kept == 30


def test_measures_of_a_known_strain():
    """Stretches exp(0.004), exp(-0.002), 1: strain 0.004, shape strain 0.004 - 0.002/3 (from the definition)."""
    crystal = draw.random_crystal(np.random.default_rng(47), "aP", 3)
    cell = draw.reduced(crystal[0])
    positions = crystal[1] @ crystal[0] @ np.linalg.inv(cell)
    stretched = cell @ np.diag(np.exp([0.004, -0.002, 0.0]))
    got = match(batch_from_lists([cell, stretched], [positions] * 2, [crystal[2]] * 2), T)
    assert abs(got.strain[0] - 0.004) < 1e-9
    assert abs(got.shape_strain[0] - (0.004 - 0.002 / 3)) < 1e-9
    assert abs(got.volume_ratio[0] - np.exp(0.002)) < 1e-9
    assert got.larger[0] == 1
    assert got.largest_shift[0] < 1e-9


def test_windows_must_ascend():
    with pytest.raises(ValueError, match="ascending"):
        Window((0.05, 0.01, 0.075), (0.001, 0.01, 0.015))
