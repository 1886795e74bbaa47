"""Matches between layers: brute force, noise, strain and supercells, audited witnesses, bulk kept off."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.fingerprint.distributions import distributions
from lattice_census.grouping.audit import Given, audit
from lattice_census.grouping.candidates import candidate_pairs, start_search
from lattice_census.grouping.composition import Options, group_composition
from lattice_census.grouping.preparation import prepare
from lattice_census.grouping.verification import match, verify
from lattice_census.grouping.window import Window, near_window
from lattice_census.model.batch import CrystalBatch, select
from lattice_census.tolerances import Tolerances

from .invariants import check_grouping, check_matches
from .slow_layers import slow_layer_match
from .strategies import LAYER_TYPES, batch, disguise_layer, layers, random_layer, supercell
from .test_layer_form import built, flipped, janus, mirrored
from .test_match import claims

T = Tolerances()
WINDOW = near_window(T)


def canonical(crystals) -> CrystalBatch:
    result = canonicalise(layers(crystals), T)
    assert not result.refusals
    return result.crystals


def relatives(rng, layer_type: str, folds=(1, 1, 2), noise: float = 0.03, strain: float = 0.006, sites: int = 2):
    """A layer of one plane type in several noisy supercells, each its own primitive layer."""
    base = random_layer(rng, layer_type, sites, ("Si", "O"))
    return [
        disguise_layer(rng, supercell(base, np.diag([fold, 1, rng.choice((-1, 1))])), 1, noise, strain)
        for fold in folds
    ]


def moved_site(layer, by: float):
    """One site moved along the normal."""
    cell, positions, tokens = layer
    out = positions.copy()
    out[0, 2] += by / np.linalg.norm(cell[2])
    return cell, out, tokens


def longer_edge(layer, factor: float):
    cell, positions, tokens = layer
    out = cell.copy()
    out[0] = out[0] * factor
    return out, positions, tokens


@pytest.mark.parametrize("number", [12, pytest.param(100, marks=pytest.mark.slow)])
def test_matches_agree_with_brute_force(number):
    """Grade, shift, strains and hand of the recorded match, whatever common cell it stands in."""
    compared = 0
    for seed in range(number):
        rng = np.random.default_rng(800 + seed)
        folds = (1, 1, 2) if seed % 3 else (1, 2, 3)
        crystals = relatives(rng, LAYER_TYPES[seed % 5], folds)
        found = canonicalise(layers(crystals), T)
        prepared = prepare(found.crystals, WINDOW)
        pairs = np.array(list(itertools.combinations(range(len(crystals)), 2)))
        ours = verify(prepared, pairs, WINDOW)
        for i, (a, b) in enumerate(pairs.tolist()):
            twin = slow_layer_match(crystals[a], crystals[b], WINDOW.shifts, WINDOW.strains, 3)
            assert ours.grade[i] == (3 if twin is None else twin.grade), (seed, a, b)
            if twin is None:
                continue
            compared += 1
            assert ours.largest_shift[i] == pytest.approx(twin.shift, abs=1e-7)
            assert ours.strain[i] == pytest.approx(twin.strain, abs=1e-9)
            assert ours.shape_strain[i] == pytest.approx(twin.shape_strain, abs=1e-9)
            assert ours.rms_shift[i] == pytest.approx(twin.rms, abs=1e-7)
            assert ours.improper[i] != twin.proper
    assert compared >= 2 * number


def test_ambiguous_pairings_agree_with_brute_force():
    """In a window wider than the sites are apart the nearest site need not be the partner: the assignment decides."""
    wide = Window((0.2, 0.3, 0.4), (0.004, 0.008, 0.012))
    compared = ambiguous = 0
    for seed in range(15):
        rng = np.random.default_rng(870 + seed)
        crystals = relatives(rng, LAYER_TYPES[seed % 5], (1, 1), noise=0.25, strain=0.004, sites=4)
        prepared = prepare(canonical(crystals), wide)
        ambiguous += int(4 * wide.shift > prepared.crystals.clear.min())
        ours = verify(prepared, np.array([[0, 1]]), wide)
        twin = slow_layer_match(*crystals, wide.shifts, wide.strains)
        assert ours.grade[0] == (3 if twin is None else twin.grade)
        if twin is not None:
            compared += 1
            assert ours.largest_shift[0] == pytest.approx(twin.shift, abs=1e-7)
            assert ours.strain[0] == pytest.approx(twin.strain, abs=1e-9)
    assert compared > 8 and ambiguous > 5


@pytest.mark.parametrize("number", [20, pytest.param(150, marks=pytest.mark.slow)])
def test_noise_and_strain_are_found_and_near_misses_are_not(number):
    """Noise 0.02 and strain 0.002 are found at near by filters and matcher together; a site moved by 0.6 and an edge
    2 % longer are not merged. (Of two sites alone, one moved along the normal may give the same layer upside down.)"""
    rng = np.random.default_rng(810)
    for i in range(number):
        base = random_layer(rng, LAYER_TYPES[i % 5], int(rng.integers(3, 7)))
        copies = [disguise_layer(rng, base, noise=0.02, strain=0.002) for _ in range(3)]
        wrong = [disguise_layer(rng, moved_site(base, 0.6)), disguise_layer(rng, longer_edge(base, 1.02))]
        found = canonical(copies + wrong)
        ids = [f"r{k}" for k in range(len(found))]
        keys = canonicalise(found, T).crystal_key
        grouping = group_composition(found, keys, ids, range(5), T)
        near = grouping.members["near"]
        assert near.family_id.tolist() == ["r0", "r0", "r0", "r3", "r4"]
        check_matches(grouping)


def test_grouping_keeps_its_promises():
    """Families and groups of a mixed crowd of layers, with the true pairs from brute force."""
    rng = np.random.default_rng(811)
    crystals = []
    for t in ("mp", "hp"):
        crystals += relatives(rng, t, (1, 1, 1, 2), noise=0.04)
    found = canonical(crystals)
    ids = [f"r{k}" for k in range(len(crystals))]
    near = {}
    for a, b in itertools.combinations(range(len(crystals)), 2):
        twin = slow_layer_match(crystals[a], crystals[b], WINDOW.shifts, WINDOW.strains, 2)
        near[ids[a], ids[b]] = near[ids[b], ids[a]] = twin is not None and twin.grade <= 1
    assert any(near.values()) and not all(near.values())
    rank = rng.permutation(len(ids))
    grouping = group_composition(found, canonicalise(found, T).crystal_key, ids, rank, T)
    check_grouping(grouping, dict(zip(ids, rank.tolist(), strict=True)), near, "near")


def test_no_filter_loses_a_pair():
    """Every pair within the window by brute force is a candidate, and the bound of DESIGN holds for its distances."""
    kept = 0
    for seed in range(8):
        rng = np.random.default_rng(820 + seed)
        crystals = relatives(rng, LAYER_TYPES[seed % 5], (1, 1, 1, 2), noise=0.07, strain=0.014)
        found = canonical(crystals)
        candidates = {tuple(p) for p in candidate_pairs(start_search(found, WINDOW)).pairs.tolist()}
        for a, b in itertools.combinations(range(len(crystals)), 2):
            if slow_layer_match(crystals[a], crystals[b], WINDOW.shifts, WINDOW.strains, 2) is not None:
                kept += 1
                assert (a, b) in candidates
    assert kept > 10


def test_neighbours_lie_inside_the_layer():
    """Distances by trying images in the plane alone; none reaches the next layer of the frame."""
    rng = np.random.default_rng(830)
    found = canonical([random_layer(rng, t, 3) for t in LAYER_TYPES])
    rows = distributions(found, 40)
    box = np.array(list(itertools.product(range(-12, 13), range(-12, 13), (0,))))
    for i in range(len(found)):
        x = found.positions[found.sites(i)]
        for k, site in enumerate(x):
            d = np.linalg.norm((x[:, None] - site + box[None]) @ found.cells[i], axis=-1).ravel()
            plain = np.sort(d)[1:41]
            np.testing.assert_allclose(rows.total[found.offsets[i] + k], plain, atol=1e-9)


def test_a_layer_and_its_sides():
    """Flipped is the same by a proper motion; mirrored by an improper one alone where the layer is chiral."""
    rng = np.random.default_rng(831)
    chiral = random_layer(rng, "mp", 4)
    for layer, hand in ((chiral, True), (janus(), False), (built("MoS2"), False)):
        side = match(canonical([layer, disguise_layer(rng, flipped(layer))]), T)
        assert side.grade[0] == 0 and not side.mirrored[0] and side.proper_grade[0] == 0
        image = match(canonical([layer, disguise_layer(rng, mirrored(layer))]), T)
        assert image.grade[0] == 0 and image.mirrored[0] == hand
        apart = match(canonical([layer, mirrored(layer)]), T, mirror_images="separate")
        assert (apart.proper_grade[0] == 3) == hand


def test_measures_of_a_known_strain():
    """Stretches exp(0.004) and exp(-0.002) in the plane: shape strain is 0.003, the ratio of areas exp(0.002); heights
    count in the shift and are not stretched (from the definition)."""
    plane = random_layer(np.random.default_rng(832), "op", 3)
    cell, positions, tokens = plane
    stretched = cell @ np.diag(np.exp([0.004, -0.002, 0.0]))
    got = match(canonical([plane, (stretched, positions, tokens)]), T)
    assert got.strain[0] == pytest.approx(0.004, abs=1e-9)
    assert got.shape_strain[0] == pytest.approx(0.003, abs=1e-9)
    assert got.volume_ratio[0] == pytest.approx(np.exp(0.002), abs=1e-9)
    assert got.largest_shift[0] < 1e-9
    got = match(canonical([plane, moved_site(plane, 0.03)]), T)
    assert got.strain[0] < 1e-12
    assert got.largest_shift[0] == pytest.approx(0.02, abs=1e-9)  # 0.03 less the mean of (0.03, 0, 0)


def test_layers_and_bulk_crystals_never_match():
    one = built("graphene")
    both = batch([one, one])
    mixed = CrystalBatch(
        both.cells, both.offsets, both.positions, both.species, both.tokens, np.array([2, 3], np.uint8)
    )
    result = canonicalise(mixed, T)
    prepared = prepare(result.crystals, WINDOW)
    assert verify(prepared, np.array([[0, 1]]), WINDOW).grade.tolist() == [3]


@pytest.mark.parametrize("kind", ["rescaled", "isotypic"])
def test_layers_at_another_size(kind):
    """A layer 8 % larger in every direction, heights too: rescaled; with other species as well: isotypic."""
    rng = np.random.default_rng(833)
    base = random_layer(rng, "mp", 4)
    larger = (base[0] * 1.08, base[1], base[2])
    flat = (base[0] * np.array([[1.08], [1.08], [1.0]]), base[1], base[2])  # heights kept: another layer
    found = canonical([base, disguise_layer(rng, larger, 2, 0.004), disguise_layer(rng, flat)])
    if kind == "isotypic":
        renamed = (larger[0], larger[1], ["O" if t == "Si" else "Si" for t in larger[2]])
        found = canonical([base, disguise_layer(rng, renamed, 2, 0.004), disguise_layer(rng, flat)])
    grouping = group_composition(found, ["a", "b", "c"], ["r0", "r1", "r2"], range(3), T, Options(search=kind))
    assert grouping.members[kind].group_id.tolist() == ["r0", "r0", "r2"]
    ratio = 1.08**2
    assert grouping.matches.volume_ratio == pytest.approx([ratio], rel=2e-2 if kind == "isotypic" else 2e-3)


def given_of(batch_given, result, i: int) -> Given:
    """Layer i as it came."""
    row = int(result.rows[i])
    part = slice(int(result.given_offsets[i]), int(result.given_offsets[i + 1]))
    return Given(
        batch_given.cells[row], batch_given.positions[batch_given.sites(row)], batch_given.tokens_of(row),
        result.multiplicity_matrix[i], result.rotation[i], result.origin[i], result.site_map[part].astype(np.int64),
        result.site_shift[part].astype(np.int64), float(result.residual[i]), layer=True,
    )  # fmt: skip


def test_every_witness_passes_the_audit_and_damage_does_not():
    count = 0
    for seed in range(12):
        rng = np.random.default_rng(840 + seed)
        crystals = relatives(rng, LAYER_TYPES[seed % 5], (1, 2, 3), noise=0.02, strain=0.002)
        crystals += [mirrored(crystals[0]), disguise_layer(rng, crystals[1], 3)]
        given = layers(crystals)
        result = canonicalise(given, T)
        for (a, b), claim in claims(given, result):
            first, second = given_of(given, result, a), given_of(given, result, b)
            assert audit(first, second, claim) == []
            count += 1
            wrong = first.site_shift.copy()
            wrong[0, 2] += 1
            assert audit(replace(first, site_shift=wrong), second, claim)
            assert audit(replace(first, layer=False), second, claim)
            mixed = claim.p_matrix.copy()
            mixed[2, 0] += 1
            assert any("normal" in f for f in audit(first, second, replace(claim, p_matrix=mixed)))
    assert count > 100


def test_measures_do_not_depend_on_which_comes_first():
    rng = np.random.default_rng(850)
    found = canonical(relatives(rng, "mp", (1, 1, 2)) + relatives(rng, "tp", (1, 2)))
    prepared = prepare(found, WINDOW)
    pairs = np.array(list(itertools.combinations(range(len(found)), 2)))
    one, two = verify(prepared, pairs, WINDOW), verify(prepared, pairs[:, ::-1], WINDOW)
    assert (one.grade == two.grade).all() and (one.grade < 3).any()
    for name in ("strain", "shape_strain", "largest_shift", "rms_shift", "volume_ratio"):
        assert np.nanmax(np.abs(getattr(one, name) - getattr(two, name)), initial=0.0) < 1e-9
    alone = select(found, np.array([0, 1]))
    again = verify(prepare(alone, WINDOW), np.array([[0, 1]]), WINDOW)
    assert again.grade[0] == one.grade[0]
