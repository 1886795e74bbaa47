"""Distance distributions: against brute force, independent of the description, bounded search, float32 means."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from lattice_census.fingerprint.distributions import column_means, distributions, fingerprint, species_ranks

from . import strategies as draw


def brute_rows(crystal: draw.Crystal, k: int) -> list[list[tuple[float, str]]]:
    """(distance, species) of the k nearest neighbours of each site: all images in a box that is surely large enough."""
    cell, positions, tokens = crystal
    volume = abs(np.linalg.det(cell))
    radius = 1.2 * (3 * volume * k / (4 * np.pi * len(tokens))) ** (1 / 3) + np.linalg.norm(cell, axis=1).max()
    reach = np.ceil(radius * np.linalg.norm(np.linalg.inv(cell), axis=0)).astype(int) + 1
    shifts = np.array(list(itertools.product(*(range(-r, r + 1) for r in reach))))
    out = []
    for i in range(len(tokens)):
        found = []
        for j in range(len(tokens)):
            lengths = np.linalg.norm((positions[j] - positions[i] + shifts) @ cell, axis=1)
            found += [(r, tokens[j]) for r in lengths.tolist() if r > 1e-9]
        out.append(sorted(found)[:k])
    return out


@pytest.mark.parametrize("lattice_type", draw.LATTICE_TYPES)
def test_rows_equal_brute_force(lattice_type):
    rng = np.random.default_rng(sum(map(ord, lattice_type)))
    for sites in (1, 2, 5):
        cell, positions, tokens = draw.random_crystal(rng, lattice_type, sites, ("Si", "O", "C"))
        cell = draw.unimodular(rng, 3) @ cell  # any basis will do
        crystal = (cell, positions, tokens)
        rows = distributions(draw.batch([crystal]), 40)
        kinds = sorted(set(tokens))
        for i, expected in enumerate(brute_rows(crystal, 40)):
            assert np.abs(rows.total[i] - [r for r, _ in expected]).max() < 1e-9
            at = 0
            for s, kind in enumerate(kinds):
                mine = rows.grouped[i, at : at + rows.counts[i, s]]
                theirs = sorted(r for r, t in brute_rows_all(crystal, i, kind, 40))[: rows.counts[i, s]]
                assert np.abs(mine - theirs).max(initial=0.0) < 1e-9
                at += rows.counts[i, s]
            assert at == 40


def brute_rows_all(crystal, i, kind, k):
    """Neighbours of site i of one species, more than enough of them."""
    cell, positions, tokens = crystal
    short = draw.reduced(cell)
    cell, positions = short, positions @ cell @ np.linalg.inv(short)
    shifts = np.array(list(itertools.product(range(-9, 10), repeat=3)))
    out = []
    for j in range(len(tokens)):
        if tokens[j] == kind:
            lengths = np.linalg.norm((positions[j] - positions[i] + shifts) @ cell, axis=1)
            out += [(r, kind) for r in lengths.tolist() if r > 1e-9]
    return out


def test_flat_and_long_cells_lose_no_neighbour():
    rng = np.random.default_rng(7)
    for edges in ((2.5, 2.5, 40.0), (2.0, 30.0, 30.0), (3.0, 3.0, 3.0)):
        cell = draw.cell_from_parameters(*edges, 80, 95, 110)
        crystal = (cell, rng.random((2, 3)), ["Si", "Si"])
        rows = distributions(draw.batch([crystal]), 64)
        for i, expected in enumerate(brute_rows(crystal, 64)):
            assert np.abs(rows.total[i] - [r for r, _ in expected]).max() < 1e-9


def test_means_do_not_depend_on_the_description():
    rng = np.random.default_rng(11)
    for lattice_type in draw.LATTICE_TYPES:
        crystal = draw.random_crystal(rng, lattice_type, 5, ("Si", "O"))
        others = [draw.mirror(crystal)] + [draw.disguise(rng, crystal, max_index=4) for _ in range(3)]
        found = fingerprint(draw.batch([crystal, *others])).means.reshape(5, 2, -1)
        assert np.abs(found[1:] - found[0]).max() < 2e-6


def test_order_of_sites_moves_no_bit():
    rng = np.random.default_rng(13)
    cell, positions, tokens = draw.random_crystal(rng, "aP", 12, ("Si", "O", "C"))
    first = fingerprint(draw.batch([(cell, positions, tokens)])).means
    for _ in range(5):
        order = rng.permutation(12)
        other = fingerprint(draw.batch([(cell, positions[order], [tokens[i] for i in order])])).means
        assert np.abs(first - other).max() < 1e-6
        rows = distributions(draw.batch([(cell, positions, tokens)]))
        same_rows = type(rows)(rows.total[order], rows.grouped[order], rows.counts[order], rows.ranks[order])
        shuffled = draw.batch([(cell, positions[order], [tokens[i] for i in order])])
        assert (column_means(shuffled, same_rows).means == first).all()


def test_means_are_those_of_the_rows_by_species():
    rng = np.random.default_rng(17)
    crystals = [draw.random_crystal(rng, "oP", n, ("Si", "O")) for n in (2, 3, 6)]
    crystals.append(draw.random_crystal(rng, "cP", 1, ("C",)))
    batch = draw.batch(crystals)
    rows = distributions(batch)
    means = column_means(batch, rows)
    assert means.offsets.tolist() == [0, 2, 4, 6, 7]
    ranks = species_ranks(batch)
    row = 0
    for i in range(4):
        part = batch.sites(i)
        for s in range(means.offsets[i + 1] - means.offsets[i]):
            expected = rows.total[part][ranks[part] == s].mean(axis=0)
            assert np.abs(means.means[row] - expected).max() < 1e-5
            row += 1


def test_noise_moves_distances_by_no_more_than_twice_itself():
    rng = np.random.default_rng(19)
    crystal = draw.random_crystal(rng, "mP", 6)
    noisy = (
        crystal[0],
        crystal[1] + 0.02 / np.sqrt(3) * rng.uniform(-1, 1, (6, 3)) @ np.linalg.inv(crystal[0]),
        crystal[2],
    )
    rows = distributions(draw.batch([crystal, noisy]))
    assert 1e-4 < np.abs(rows.total[:6] - rows.total[6:]).max() <= 0.04
