"""The filter loses nothing: against the slow twin on whole collections of one composition, at three tolerances."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.grouping.candidates import candidate_pairs, start_search
from lattice_census.grouping.preparation import transform
from lattice_census.grouping.scaled import unit_scales
from lattice_census.grouping.window import isotypic_window, near_window
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .slow_match import slow_match

LOOSENESS = [0.5, 1.0, 1.6]


def scaled(factor: float) -> Tolerances:
    t = Tolerances()
    names = ("same_shift", "same_strain", "near_shift", "near_strain")
    return replace(t, **{n: getattr(t, n) * factor for n in names})


def canonical(crystals: list[draw.Crystal]) -> list[draw.Crystal]:
    """The canonical crystals, as triples."""
    found = canonicalise(draw.batch(crystals), Tolerances())
    assert not found.refusals
    b = found.crystals
    return [(b.cells[i], b.positions[b.sites(i)], b.tokens_of(i)) for i in range(len(b))]


def relatives(rng: np.random.Generator, lattice_type: str, sites: int, copies: int) -> list[draw.Crystal]:
    """One random crystal, and copies at distances around the limits: noise, strain, doubled cells, other crystals."""
    elements = ("Si", "O") if sites % 2 == 0 else ("Si",)
    base = draw.random_crystal(rng, lattice_type, sites, elements)
    out = [base, draw.random_crystal(rng, lattice_type, sites, elements)]
    for _ in range(copies):
        out.append(draw.disguise(rng, base, 1, noise=rng.choice([0.01, 0.04, 0.09]), strain=rng.choice([0.001, 0.008])))
    out.append(draw.disguise(rng, draw.supercell(base, np.diag([2, 1, 1])), 1, noise=0.03, strain=0.003))
    return canonical(out)


@pytest.mark.parametrize("factor", LOOSENESS)
def test_no_pair_is_missed(factor):
    check_no_pair_is_missed(factor, range(5), 3)


@pytest.mark.slow
@pytest.mark.parametrize("factor", LOOSENESS)
def test_no_pair_is_missed_on_many(factor):
    check_no_pair_is_missed(factor, range(5, 25), 4)


def check_no_pair_is_missed(factor, seeds, copies):
    window = near_window(scaled(factor))
    true_pairs = 0
    for seed in seeds:
        rng = np.random.default_rng(1000 + seed)
        crystals = relatives(rng, draw.LATTICE_TYPES[seed % 14], int(rng.integers(1, 5)), copies)
        left = {tuple(p) for p in candidate_pairs(start_search(draw.batch(crystals), window)).pairs.tolist()}
        for a, b in itertools.combinations(range(len(crystals)), 2):
            if slow_match(crystals[a], crystals[b], window.shifts, window.strains, 2) is not None:
                assert (a, b) in left
                true_pairs += 1
    assert true_pairs > 3 * len(seeds)


def stacked(layers: str, spacing: float = 2.51) -> draw.Crystal:
    """A close-packed stacking of Si-C double layers: letters are the positions A, B, C of each (SiC polytypes)."""
    a = 3.08
    cell = draw.cell_from_parameters(a, a, spacing * len(layers), 90, 90, 120)
    place = {"A": (0.0, 0.0), "B": (1 / 3, 2 / 3), "C": (2 / 3, 1 / 3)}
    positions, tokens = [], []
    for i, letter in enumerate(layers):
        positions += [(*place[letter], i / len(layers)), (*place[letter], (i + 0.75) / len(layers))]
        tokens += ["Si", "C"]
    return cell, np.array(positions), tokens


def test_polytypes_are_candidates_where_they_match():
    rng = np.random.default_rng(23)
    crystals = [stacked(s) for s in ("AB", "ABC", "ABCB", "ABCACB", "ABABCBCAC")]
    noisy = [draw.disguise(rng, c, 1, noise=0.02, strain=0.002) for c in crystals]
    found = canonical(crystals + noisy)
    left = {
        tuple(p) for p in candidate_pairs(start_search(draw.batch(found), near_window(Tolerances()))).pairs.tolist()
    }
    for i in range(5):
        assert (i, i + 5) in left


def test_the_filter_filters():
    rng = np.random.default_rng(29)
    crystals = canonical([draw.random_crystal(rng, "aP", 4) for _ in range(60)])
    assert len(candidate_pairs(start_search(draw.batch(crystals), near_window(Tolerances()))).pairs) < 60


def test_cell_and_number_of_sites_are_no_filter():
    """A noisy doubled cell and the plain one have other numbers of sites, reduced cells and space groups."""
    rng = np.random.default_rng(31)
    base = draw.random_crystal(rng, "cF", 2)
    doubled = [draw.disguise(rng, draw.supercell(base, m), 1, noise=0.02) for m in draw.hermite_matrices(2)[:3]]
    crystals = canonical([base, *doubled])
    assert len({len(c[2]) for c in crystals}) == 2
    assert len(candidate_pairs(start_search(draw.batch(crystals), near_window(Tolerances()))).pairs) == 6


def test_scaling_to_unit_volume_finds_copies_at_any_volume():
    rng = np.random.default_rng(37)
    base = draw.random_crystal(rng, "mP", 4)
    blown = (base[0] * 1.3, base[1], base[2])
    crystals = canonical([base, blown])
    window = isotypic_window(Tolerances())
    both = draw.batch(crystals)
    assert len(candidate_pairs(start_search(both, window, unit_scales(both))).pairs) == 1
    assert len(candidate_pairs(start_search(draw.batch(crystals), near_window(Tolerances()))).pairs) == 0


def test_transform_turns_the_bound_into_a_ball():
    """d' = exp(s) d + c is exactly s away; the same bound read the other way too (float32 rounding allowed for)."""
    s, shift = 0.015, 0.075
    c = 2 * np.exp(s / 2) * shift
    d = np.linspace(0.5, 30, 200)
    y, z = transform(d, shift, s), transform(np.exp(s) * d + c, shift, s)
    assert np.abs((z - y) - s).max() < 2e-6
