"""Frames lose nothing: against all pairs compared, for crystals with and without symmetry, supercells, mirror images,
layers, and limits around the noise; and what they rule out is most of what does not match."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
import spglib

from lattice_census.cell.canonical import canonicalise
from lattice_census.grouping import composition, hubs
from lattice_census.grouping.candidates import start_search
from lattice_census.grouping.composition import Options, group_composition
from lattice_census.grouping.frames import Frame, FrameFilter
from lattice_census.grouping.hubs import averaged, find_frames
from lattice_census.grouping.pair_store import Limit, PairStore
from lattice_census.grouping.preparation import prepare
from lattice_census.grouping.self_maps import lattice_self_maps, nearly_translated, self_maps
from lattice_census.grouping.verification import NO_MATCH, Verified, verify
from lattice_census.grouping.window import near_window
from lattice_census.kernels.lattice_maps import reduced_bases
from lattice_census.model.batch import CrystalBatch
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .invariants import check_grouping, check_matches

T = Tolerances()
NONE = np.zeros((0, 2), np.int64)

ROCK_SALT = (draw.PRIMITIVE["F"] * 5.64, np.array([[0.0] * 3, [0.5] * 3]), ["Na", "Cl"])
CLOSE_PACKED = (
    draw.cell_from_parameters(2.5, 2.5, 2.5 * np.sqrt(8 / 3), 90, 90, 120),
    np.array([[1 / 3, 2 / 3, 0.25], [2 / 3, 1 / 3, 0.75]]),
    ["Cu", "Cu"],
)
PEROVSKITE = (
    np.eye(3) * 4.0,
    np.array([[0, 0, 0], [0.5, 0.5, 0.5], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5]]),
    ["Ba", "Ti", "O", "O", "O"],
)
GRAPHENE = (
    draw.cell_from_parameters(2.46, 2.46, 15, 90, 90, 120),
    np.array([[1 / 3, 2 / 3, 0.0], [2 / 3, 1 / 3, 0.0]]),
    ["C", "C"],
)
BASES = {
    "rock salt": ROCK_SALT,
    "close packed": CLOSE_PACKED,
    "perovskite": PEROVSKITE,
    "no symmetry": draw.random_crystal(np.random.default_rng(1), "aP", 6),
    "symmetric lattice": draw.random_crystal(np.random.default_rng(2), "cP", 5),
    "layer": draw.random_layer(np.random.default_rng(3), "tp", 4),
    "symmetric layer": GRAPHENE,
}
LAYERS = ("layer", "symmetric layer")
NAMES = (*BASES, "doubled rock salt", "doubled no symmetry", "doubled layer")


def copies(name: str, seed: int, count: int, noise: float, strain: float) -> CrystalBatch:
    """Canonical crystals of noisy copies, some of them doubled and tripled cells or mirror images, and of the crystal
    itself. `doubled NAME`: doubled and fourfold cells alone."""
    rng = np.random.default_rng(seed)
    of = name.removeprefix("doubled ")
    disguise = draw.disguise_layer if of in LAYERS else draw.disguise
    base, made = BASES[of], []
    if of == name:
        made = [disguise(rng, base, 1)]
    else:
        base = draw.supercell(base, np.diag([1, 2, 1]))
    while len(made) < count:
        larger = 1 if len(made) % 3 else 2 if base is not BASES[of] else 3
        made.append(disguise(rng, base, larger, noise=noise, strain=strain))
    found = canonicalise((draw.layers if of in LAYERS else draw.batch)(made), T)
    assert not found.refusals
    return found.crystals


def all_pairs(crystals: CrystalBatch, tolerances: Tolerances, mirror_images: str = "merge") -> Verified:
    """Every pair, compared."""
    window = near_window(tolerances)
    first, second = np.triu_indices(len(crystals), 1)
    return verify(prepare(crystals, window), np.stack([first, second], axis=1), window, mirror_images)


def check_frames(name: str, seed: int, count: int, tolerances: Tolerances, noise: float) -> tuple[int, int, int]:
    """No match between members of a frame is ruled out, either way round. Returns how many matches and other pairs
    there were, and how many of the others were ruled out."""
    crystals = copies(name, seed, count, noise, 0.1 * noise)
    return check_filters(crystals, frames_of(crystals, tolerances, seed), tolerances, (name, seed))


def frames_of(crystals: CrystalBatch, tolerances: Tolerances, seed: int) -> list[Frame]:
    """Frames of a crowd of all the crystals."""
    window, count = near_window(tolerances), len(crystals)
    search = start_search(crystals, window)
    store = PairStore(count, lambda p: verify(search.prepared, p, window), NONE, NONE)
    return find_frames(search, store, np.arange(count), np.random.default_rng(seed).permutation(count))


def check_filters(
    crystals: CrystalBatch, found: list[Frame], tolerances: Tolerances, told_of: object
) -> tuple[int, int, int]:
    """As check_frames, of given frames."""
    grade = {tuple(p): g for p, g in zip(*_lists(all_pairs(crystals, tolerances)), strict=True)}
    matches = others = ruled_out = 0
    for limit in (  # of the grades and of the window
        Limit(0, tolerances.same_shift, tolerances.same_strain, False),
        Limit(1, tolerances.near_shift, tolerances.near_strain, False),
        Limit(2, near_window(tolerances).shift, near_window(tolerances).strain, False),
    ):
        for frame in found:
            told = FrameFilter(frame, limit)
            members = told.members.tolist()
            for row, a in enumerate(members):
                left = told(row, np.arange(len(members)))
                for other, b in enumerate(members):
                    if a == b:
                        continue
                    match = grade[min(a, b), max(a, b)] <= limit.grade
                    assert left[other] or not match, (told_of, a, b, limit)
                    matches, others = matches + match, others + (not match)
                    ruled_out += not left[other]
    return matches, others, ruled_out


def _lists(found: Verified) -> tuple[list[list[int]], list[int]]:
    return [tuple(p) for p in found.pairs.tolist()], found.grade.tolist()  # type: ignore[return-value]


@pytest.fixture
def small_frames(monkeypatch):
    """Frames are made of a few members already."""
    monkeypatch.setattr(hubs, "FEWEST", 3)
    monkeypatch.setattr(hubs, "EXTRA", 20)


def scaled(factor: float) -> Tolerances:
    names = ("same_shift", "same_strain", "near_shift", "near_strain")
    return replace(T, **{n: getattr(T, n) * factor for n in names})


def check_on(name: str, seeds: range, count: int) -> None:
    """Noise at which copies match about as often as they do not, at both grades, in the window, at three tolerances."""
    matches = others = ruled_out = 0
    for seed in seeds:
        for factor, noise in ((1.0, 0.008), (1.0, 0.035), (0.5, 0.004), (1.5, 0.012)):
            told = check_frames(name, 100 * seed + int(1000 * noise), count, scaled(factor), noise)
            matches, others, ruled_out = matches + told[0], others + told[1], ruled_out + told[2]
    assert matches > 50 and others > 50
    assert ruled_out > 0.6 * others


@pytest.mark.parametrize("name", NAMES)
def test_no_match_is_ruled_out_and_most_others_are(name, small_frames):
    check_on(name, range(1), 14)


@pytest.mark.slow
@pytest.mark.parametrize("name", NAMES)
def test_no_match_is_ruled_out_on_many(name, small_frames):
    check_on(name, range(1, 5), 24)


@pytest.mark.parametrize("mirror_images", ["merge", "separate"])
@pytest.mark.parametrize("name", NAMES)
def test_grouping_by_frames_equals_all_pairs(name, mirror_images, small_frames):
    """Families and groups of a crowd at both grades, with all pairs compared as the truth."""
    made = 0
    for seed, noise in ((7, 0.008), (8, 0.035)):
        crystals = copies(name, seed, 24, noise, 0.1 * noise)
        keys = [f"k{i}" for i in range(24)]  # every record a node of its own
        ids = [f"r{i:02}" for i in range(24)]
        rank = np.random.default_rng(seed).permutation(24)
        options = Options(mirror_images=mirror_images, crowded=4)
        found = group_composition(crystals, keys, ids, rank, T, options)
        assert found.counts["crowded"] > 12
        check_matches(found)
        truth = all_pairs(crystals, T, mirror_images)
        grades = (truth.proper_grade if mirror_images == "separate" else truth.grade).tolist()
        ranks = dict(zip(ids, rank.tolist(), strict=True))
        for grade, name_of in enumerate(("same", "near")):
            near = {}
            for (a, b), g in zip(truth.pairs.tolist(), grades, strict=True):
                near[ids[a], ids[b]] = near[ids[b], ids[a]] = g <= grade
            check_grouping(found, ranks, near, name_of)
            made += sum(near.values())
    assert made > 30


@pytest.mark.parametrize("fewest", [3, 1000])
def test_a_chain_is_one_family(monkeypatch, fewest):
    """One site moved by 0.035 further in each of three crowds, the last of one record: the best-ranked record takes the
    first two, and what joins the third is a pair of a kept record with a taken one. No pair is verified but where it is
    needed; with frames and without."""
    monkeypatch.setattr(hubs, "FEWEST", fewest)
    monkeypatch.setattr(composition, "CROWD_NEIGHBOURS", 0)
    rng = np.random.default_rng(6)
    cell, positions, tokens = BASES["no symmetry"]
    made = []
    for i in range(41):
        moved = positions.copy()
        moved[0] += np.array([0.035 * 6 / 5 * (i // 20), 0, 0]) @ np.linalg.inv(cell)
        made.append(draw.disguise(rng, (cell, moved, tokens), 1, noise=0.001))
    crystals = canonicalise(draw.batch(made), T).crystals
    ids = [f"r{i:02}" for i in range(41)]
    found = group_composition(crystals, ids, ids, np.arange(41), T, Options(crowded=4))
    near = found.members["near"]
    assert near.family_id.tolist() == ["r00"] * 41
    assert near.group_id.tolist() == ["r00"] * 40 + ["r40"]
    check_matches(found)


def test_a_crystal_is_laid_onto_itself_by_its_symmetry_operations():
    """As many ways as spglib counts operations of the primitive cell (at symprec 1e-5)."""
    for name, (cell, positions, tokens) in BASES.items():
        if name in LAYERS:
            continue
        crystals = canonicalise(draw.batch([(cell, positions, tokens)]), T).crystals
        c = prepare(crystals, near_window(T)).crystals
        numbers = [sorted(set(tokens)).index(t) + 1 for t in crystals.tokens_of(0)]
        known = spglib.get_symmetry((crystals.cells[0], crystals.positions, numbers), symprec=1e-5)
        maps, partners, offsets = self_maps(c, 0, 0.01, 0.1)
        assert len(maps) == len(known["rotations"]), name
        assert sorted(m.tolist() for m in maps) == sorted(np.transpose(r).tolist() for r in known["rotations"])
        assert np.abs(offsets).max() < 1e-6
        for w, to in zip(maps, partners, strict=True):  # x W + t = x of the partner, up to lattice vectors
            off = c.positions[to] - c.positions @ w
            off -= off[0]
            assert np.abs(off - np.rint(off)).max() < 1e-6


def test_lattices_are_laid_onto_themselves_by_all_small_integer_matrices_within_the_strain():
    """Against all matrices of -1, 0 and 1; lattices of all types, moved a little off their symmetry."""
    small = np.array(list(itertools.product((-1, 0, 1), repeat=9))).reshape(-1, 3, 3)
    small = small[np.abs(np.rint(np.linalg.det(small))) == 1]
    rng = np.random.default_rng(14)
    several = 0
    for lattice_type in draw.LATTICE_TYPES:
        cell = draw.primitive_cell(rng, lattice_type) @ (np.eye(3) + rng.uniform(-0.004, 0.004, (3, 3)))
        basis = reduced_bases(cell[None], np.zeros(1, bool))[0][0]
        found = {m.tobytes() for m in lattice_self_maps(basis, 0.012, False) if np.abs(m).max() <= 1}
        stretches = np.linalg.svd(np.linalg.inv(basis) @ small @ basis, compute_uv=False)
        known = {m.tobytes() for m in small[np.abs(np.log(stretches)).max(axis=1) <= 0.012]}
        assert found == known, lattice_type
        several += len(known) > 2
    assert several > 8


def test_what_is_nearly_a_smaller_cell_is_no_hub(small_frames):
    """A doubled cell with noise is nearly translated by the vector it was doubled with, the cell itself by none."""
    rng = np.random.default_rng(4)
    base = BASES["no symmetry"]
    doubled = draw.disguise(rng, draw.supercell(base, np.diag([2, 1, 1])), 1, noise=0.03)
    crystals = canonicalise(draw.batch([base, doubled]), T).crystals
    c = prepare(crystals, near_window(T)).crystals
    assert [nearly_translated(c, k, 0.3) for k in range(2)] == [False, True]
    assert not nearly_translated(c, 1, 0.001)


def test_a_hub_tells_nothing_at_a_limit_that_makes_it_a_smaller_cell(small_frames):
    """A cell doubled by a site that alternates by 0.12: the vector it was doubled with takes sites 0.24 away. With
    noise of 0.01, 4 R is about 0.12 at `same` and 0.28 at `near`."""
    cell, positions, tokens = draw.supercell(BASES["no symmetry"], np.diag([2, 1, 1]))
    first = [i for i, t in enumerate(tokens) if np.abs(positions[i] - positions[0])[1:].max() < 1e-9]
    assert len(first) == 2
    moved = positions.copy()
    moved[first] += np.array([[0.12, 0, 0], [-0.12, 0, 0]]) @ np.linalg.inv(cell)
    rng = np.random.default_rng(5)
    made = [draw.disguise(rng, (cell, moved, tokens), 1, noise=0.01) for _ in range(12)]
    search = start_search(canonicalise(draw.batch(made), T).crystals, near_window(T))
    store = PairStore(12, lambda p: verify(search.prepared, p, search.window), NONE, NONE)
    (frame,) = find_frames(search, store, np.arange(12), np.arange(12))
    assert len(FrameFilter(frame, Limit(0, 0.01, 0.001, False)).members) == 12
    assert len(FrameFilter(frame, Limit(1, 0.05, 0.01, False)).members) == 0


def test_a_noisy_larger_cell_is_averaged_over_its_translations():
    """Four cells of rock salt with noise of 0.02: what is left are its two sites, within the noise."""
    rng = np.random.default_rng(10)
    larger = draw.disguise(rng, draw.supercell(ROCK_SALT, np.diag([1, 2, 2])), 1, noise=0.02)
    crystals = canonicalise(draw.batch([larger, ROCK_SALT]), T).crystals
    window = near_window(T)
    one = averaged(prepare(crystals, window), 0)
    assert one is not None and one.tokens_of(0).count("Na") == one.tokens_of(0).count("Cl") == 1
    assert np.abs(np.linalg.det(one.cells[0])) == pytest.approx(5.64**3 / 4, rel=1e-9)
    twice = 2 * (one.positions[1] - one.positions[0])  # half a lattice vector apart
    assert 1e-6 < np.linalg.norm((twice - np.rint(twice)) @ one.cells[0]) / 2 < 0.04
    assert (np.rint(twice) % 2).any()
    assert averaged(prepare(crystals, window), 1) is None


def test_larger_cells_alone_are_seen_from_one_that_is_no_record(small_frames):
    crystals = copies("doubled rock salt", 11, 20, 0.008, 0.0008)
    search = start_search(crystals, near_window(T))
    store = PairStore(20, lambda p: verify(search.prepared, p, search.window), NONE, NONE)
    (frame,) = find_frames(search, store, np.arange(20), np.arange(20))
    assert frame.members.tolist() == list(range(20)) and store.computed == 0
    assert np.diff(frame.crystals.offsets)[frame.hub] == 2


def test_where_no_record_matches_many_the_mean_of_all_is_the_hub(monkeypatch):
    """Copies with noise of 0.055: most pairs differ by more than the window, and all are within it of their mean."""
    monkeypatch.setattr(hubs, "FEWEST", 8)
    rng = np.random.default_rng(13)
    base = draw.random_crystal(rng, "mP", 8)
    made = [draw.disguise(rng, base, 1, noise=0.055, strain=0.001) for _ in range(40)]
    crystals = canonicalise(draw.batch(made), T).crystals
    assert (all_pairs(crystals, T).grade < NO_MATCH).mean() < 0.3
    (frame,) = frames_of(crystals, T, 12)
    assert len(frame.crystals.offsets) == 42  # the mean is no record
    assert len(frame.members) == 40 and frame.farthest.max() < 0.075
    matches, others, ruled_out = check_filters(crystals, [frame], T, "mean")
    assert matches > 300 and ruled_out > 0.9 * others


def test_pairs_with_more_noise_are_ruled_out_without_comparing(small_frames):
    """Of copies whose noise is twice the limit of `same`, none is compared at that grade but with the hub and with the
    nearest ones."""
    crystals = copies("no symmetry", 9, 40, 0.02, 0.0)
    ids = [f"r{i:02}" for i in range(40)]
    found = group_composition(crystals, ids, ids, np.arange(40), T, Options(crowded=4))
    assert found.counts["verified"] < 40 * 10
    assert len(list(itertools.combinations(range(40), 2))) > 40 * 15
