"""Translations: the exact primitive crystal and the approximate one, against a plain twin and outside sources."""

from __future__ import annotations

import warnings
from pathlib import Path

import crystals
import gemmi
import numpy as np
import pytest
import spglib
from ase.build import bulk
from ase.data import chemical_symbols, reference_states

from lattice_census.cell.canonical import canonicalise
from lattice_census.kernels.translations import approximate_translations
from lattice_census.tolerances import NIGGLI_EPSILON, Tolerances
from tests import slow_canonical
from tests.invariants import check_canonical, check_pseudo
from tests.strategies import LATTICE_TYPES, batch, disguise, hermite_matrices, random_crystal, supercell, type_crystals

TOLERANCES = Tolerances()


def primitive_by_spglib(crystal):
    """Number of sites of spglib's primitive cell at 0.001."""
    cell, x, tokens = crystal
    number = {t: i + 1 for i, t in enumerate(sorted(set(tokens)))}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = spglib.find_primitive((cell, x, [number[t] for t in tokens]), symprec=1e-3)
    return None if found is None else len(found[2])


def element_crystals():
    """The elements that ase can build, in conventional cells where there are some."""
    out = {}
    for symbol, state in zip(chemical_symbols, reference_states, strict=False):
        if not state or state["symmetry"] in ("atom", "diatom"):
            continue
        for options in ({"cubic": True}, {"orthorhombic": True}, {}):
            try:
                atoms = bulk(symbol, **options)
            except (ValueError, RuntimeError, NotImplementedError, KeyError, TypeError, AssertionError):
                continue
            out[symbol] = np.array(atoms.cell), atoms.get_scaled_positions(), atoms.get_chemical_symbols()
            break
    return out


def shipped_cifs():
    """Fully occupied crystals of the CIF files that the package `crystals` ships."""
    out = {}
    for path in sorted((Path(crystals.__file__).parent / "cifs").glob("*.cif")):
        try:
            block = gemmi.cif.read(str(path)).sole_block()
        except (RuntimeError, ValueError):
            continue
        structure = gemmi.make_small_structure_from_block(block)
        sites = structure.get_all_unit_cell_sites()
        if not sites or any(s.occ < 1 for s in sites):
            continue
        cell = np.array(structure.cell.orth.mat.tolist()).T
        out[path.stem] = cell, np.array([s.fract.tolist() for s in sites]), [s.element.name for s in sites]
    return out


def test_element_crystals_have_as_many_primitive_sites_as_spglib_finds():
    """Outside sources: ase.data.reference_states, spglib.find_primitive."""
    elements = element_crystals()
    assert len(elements) >= 60
    given = batch(list(elements.values()))
    result = canonicalise(given, TOLERANCES)
    assert not result.refusals
    check_canonical(given, result)
    counts = np.diff(result.crystals.offsets)
    for symbol, count in zip(elements, counts, strict=True):
        assert count == primitive_by_spglib(elements[symbol]), symbol
    assert (result.supercell_index > 1).sum() > 20


def test_shipped_cifs_have_as_many_primitive_sites_as_spglib_finds():
    """Outside sources: the CIF files of the package `crystals`, spglib.find_primitive."""
    files = shipped_cifs()
    assert len(files) > 50
    names, given = list(files), batch(list(files.values()))
    result = canonicalise(given, TOLERANCES)
    assert len(result) > 0.9 * len(files)
    check_canonical(given, result)
    different = []
    for row, count in zip(result.rows, np.diff(result.crystals.offsets), strict=True):
        theirs = primitive_by_spglib(files[names[row]])
        if theirs is not None and theirs != count:
            different.append((names[row], int(count), theirs))
    assert not different


def test_structure_types_have_the_primitive_sites_of_the_table():
    from lattice_census.demo.structure_types import structure_types

    result = canonicalise(batch(list(type_crystals())), TOLERANCES)
    assert np.diff(result.crystals.offsets).tolist() == [t.sites_primitive for t in structure_types()]


def moved(rng, crystal, noise):
    """Each site moved by a vector of length up to `noise` angstrom."""
    cell, x, tokens = crystal
    v = rng.normal(size=x.shape)
    v *= noise * rng.random((len(x), 1)) / np.linalg.norm(v, axis=1, keepdims=True)
    return cell, x + v @ np.linalg.inv(cell), tokens


def noisy_superstructure(rng, noise, sites=3, largest=6, parent=None):
    """A random crystal (or `parent`) in a supercell with noise; and the index of the supercell."""
    parent = parent or random_crystal(rng, LATTICE_TYPES[rng.integers(14)], sites)
    index = int(rng.integers(2, largest + 1))
    matrices = hermite_matrices(index)
    return moved(rng, supercell(parent, matrices[rng.integers(len(matrices))]), noise), index


def pseudo_of(crystal, tolerance):
    """Index, H and residual of one canonical crystal, by the kernel and by the twin."""
    cell, x, tokens = crystal
    count = {t: tokens.count(t) for t in tokens}
    rank = {t: r for r, t in enumerate(sorted(count, key=lambda t: (count[t], t)))}
    kinds = np.array([rank[t] for t in tokens])
    index, h, residual = approximate_translations(
        cell[None], np.array([0, len(x)]), x, kinds, tolerance, NIGGLI_EPSILON
    )
    return (int(index[0]), h[0], float(residual[0])), slow_canonical.approximate_translations(
        cell, x, tokens, tolerance
    )


@pytest.mark.parametrize("number", [8, pytest.param(30, marks=pytest.mark.slow)])
def test_largest_group_agrees_with_exhaustion(number):
    """Noise around the tolerance on two levels, so that groups are accepted whole, in part, or not at all."""
    rng = np.random.default_rng(201)
    seen = set()
    for _ in range(number):
        inner, first = noisy_superstructure(rng, rng.choice([0.02, 0.04, 0.06]), 1, 3)
        crystal, second = noisy_superstructure(rng, rng.choice([0.01, 0.02, 0.03]), 0, 2, inner)
        exact = canonicalise(batch([crystal]), TOLERANCES)
        single = exact.crystals.cells[0], exact.crystals.positions, exact.crystals.tokens_of(0)
        ours, twin = pseudo_of(single, 0.02)
        assert ours[0] == twin[0]
        assert (ours[1] == twin[1]).all()
        assert abs(ours[2] - twin[2]) < 1e-9
        assert ours[0] == exact.pseudo_index[0] and (ours[1] == exact.pseudo_matrix[0]).all()
        seen.add("none" if ours[0] == 1 else "whole" if ours[0] == first * second else "part")
    assert {"whole", "part"} <= seen


def test_noise_below_the_tolerance_is_seen_through():
    """Sites within half the tolerance of a parent lattice: at least the parent's translations are found."""
    rng = np.random.default_rng(202)
    drawn = [noisy_superstructure(rng, 0.01) for _ in range(60)]
    given = batch([c for c, _ in drawn])
    result = canonicalise(given, TOLERANCES)
    check_canonical(given, result)
    assert (result.pseudo_index * result.supercell_index).tolist() == [i for _, i in drawn]
    assert (result.pseudo_residual[result.supercell_index == 1] > 0).all()


def test_pseudo_translations_do_not_depend_on_the_writing():
    rng = np.random.default_rng(203)
    drawn = [noisy_superstructure(rng, rng.choice([0.01, 0.02, 0.03])) for _ in range(40)]
    plain = canonicalise(batch([c for c, _ in drawn]), TOLERANCES)
    other = canonicalise(batch([disguise(rng, c, max_index=3) for c, _ in drawn]), TOLERANCES)
    assert other.crystal_key == plain.crystal_key
    assert (other.pseudo_matrix == plain.pseudo_matrix).all()
    assert np.abs(other.pseudo_residual - plain.pseudo_residual).max() < 1e-9


@pytest.mark.parametrize(("cells", "period", "height"), [(6, 3, 0.026), (4, 4, 0.015), (8, 4, 0.028)])
def test_translations_that_make_no_accepted_group(cells, period, height):
    """A row of cells with a wave along it. Over 6 cells all translations agree to twice the tolerance, but only the
    half is
    accepted; over 4 the whole group is; over 8 the translations that agree are no group, and the half is accepted."""
    cell = np.diag([3.0, 4.0, cells * 3.5])
    wave = height * np.cos(2 * np.pi * np.arange(cells) / period)
    x = np.stack([wave / 3.0, np.zeros(cells), np.arange(cells) / cells], axis=1)
    tokens = ["C"] * cells
    ours, twin = pseudo_of((cell, x, tokens), 0.02) if cells < 8 else (None, None)
    if ours is not None:
        assert ours[0] == twin[0] == {6: 2, 4: 4}[cells]
        assert (ours[1] == twin[1]).all()
    # The half is an exact translation here, so that it shows as the index of the supercell.
    result = canonicalise(batch([(cell, x, tokens)]), TOLERANCES)
    assert result.supercell_index[0] * result.pseudo_index[0] == {6: 2, 4: 4, 8: 2}[cells]
    check_pseudo(result)


def test_large_supercells_are_found_whole():
    """1,000 sites: a simple cubic crystal in ten cells each way, and the same with one species changed."""
    n = 10
    grid = np.stack(np.meshgrid(*[np.arange(n) / n] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    cell = np.eye(3) * 3 * n
    tokens = ["Po"] * n**3
    result = canonicalise(batch([(cell, grid, tokens), (cell, grid, ["At", *tokens[1:]])]), TOLERANCES)
    assert result.supercell_index.tolist() == [1000, 1]
    assert result.pseudo_index.tolist() == [1, 1]


def test_repeated_division():
    """A crystal whose average over one group has a further translation."""
    rng = np.random.default_rng(204)
    for _ in range(20):
        crystal, _ = noisy_superstructure(rng, 0.024, 1)
        result = canonicalise(batch([crystal]), TOLERANCES)
        check_pseudo(result)
        again = canonicalise(result.crystals, TOLERANCES)
        assert (again.pseudo_matrix == result.pseudo_matrix).all()
