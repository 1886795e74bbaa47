"""Niggli reduction: worked examples, an outside library, near-degenerate cells, and the set of all reduced bases."""

from __future__ import annotations

import csv
from pathlib import Path

import numba
import numpy as np
import pytest
import spglib

from lattice_census.kernels.bases import MOST_BASES, reduced_bases
from lattice_census.kernels.niggli import reduce_cells
from lattice_census.lattice.hermite import hermite_columns, hermite_rows
from lattice_census.lattice.metric import at_unit_volume, characteristics, lower_triangular, metric
from lattice_census.lattice.niggli import is_niggli_reduced
from lattice_census.tolerances import NIGGLI_EPSILON
from tests.invariants import integer_determinant
from tests.slow_canonical import all_reduced_bases, niggli_steps
from tests.strategies import LATTICE_TYPES, PRIMITIVE, primitive_cell, rotation, unimodular

TABLE = Path(__file__).parent / "tables" / "niggli_examples.csv"

PROPER_ROTATIONS = {"a": 1, "m": 2, "o": 4, "t": 8, "h": 12, "c": 24}
"""Proper rotations of each lattice system, with hP for h (common practice, no source); hR has 6."""


@numba.njit
def bases_of(cell, epsilon):
    out = np.empty((MOST_BASES, 3, 3), np.int64)
    count = reduced_bases(cell, epsilon, out)
    return out[: max(count, 0)], count


def from_six(six):
    """A right-handed cell with the given A, B, C, xi, eta, zeta."""
    a, b, c, xi, eta, zeta = six
    return np.linalg.cholesky(np.array([[a, zeta / 2, eta / 2], [zeta / 2, b, xi / 2], [eta / 2, xi / 2, c]]))


def reduce(cells, least_level=0.0):
    """Reduced cells (n, 3, 3) and matrices of right-handed cells, checked."""
    cells = np.ascontiguousarray(cells, dtype=float)
    matrices, levels = reduce_cells(cells, NIGGLI_EPSILON)
    assert (levels > 0).all() and (levels >= least_level).all()
    assert all(integer_determinant(m) == 1 for m in matrices)
    out = matrices @ cells
    assert is_niggli_reduced(metric(out), levels).all()
    return out, matrices


def six_of(cells):
    return characteristics(metric(cells))


def right_handed(cell):
    return cell * np.sign(np.linalg.det(cell))


def test_worked_examples():
    """Krivy & Gruber 1976 and the five Buerger cells of one lattice (Gruber 1973); values from memory, and checked with
    two libraries where the table says so."""
    with TABLE.open(encoding="utf-8") as f:
        rows = list(csv.reader(f))[1:]
    assert len(rows) == 6
    for row in rows:
        given, wanted = [float(x) for x in row[1:7]], [float(x) for x in row[7:13]]
        out, _ = reduce(from_six(given)[None])
        assert np.abs(six_of(out)[0] - wanted).max() < 1e-9, row[0]


def test_predicate_refuses_buerger_cells_that_are_not_niggli():
    with TABLE.open(encoding="utf-8") as f:
        rows = list(csv.reader(f))[1:]
    for row in rows:
        given, wanted = [float(x) for x in row[1:7]], [float(x) for x in row[7:13]]
        assert is_niggli_reduced(metric(from_six(wanted)), NIGGLI_EPSILON)
        assert bool(is_niggli_reduced(metric(from_six(given)), NIGGLI_EPSILON)) == (given == wanted)


def test_predicate_refuses_every_single_violation():
    """One cell for each condition, reduced but for that condition."""
    good = [[4, 5, 6, 1, 1, 1], [4, 5, 6, -1, -1, -1], [4, 5, 6, 0, 0, 0], [4, 4, 4, -8 / 3, -8 / 3, -8 / 3]]
    bad = [
        [5, 4, 6, 1, 1, 1],
        [4, 6, 5, 1, 1, 1],
        [4, 5, 6, 1, 1, -1],
        [4, 5, 6, 1, 1, 0],
        [4, 5, 6, 5.1, 1, 1],
        [4, 5, 6, 1, 4.1, 1],
        [4, 5, 6, 1, 1, 4.1],
        [4, 5, 6, -4, -3, -2.5],
        [4, 4, 6, 2, 1, 1],
        [4, 5, 5, 1, 2, 1],
        [4, 5, 6, 5, 1, 3],
        [4, 5, 6, 1, 4, 3],
        [4, 5, 6, 1, 3, 4],
        [4, 5, 6, -5, 0, -1],
        [4, 5, 6, 0, -4, -1],
        [4, 5, 6, 0, -1, -4],
        [4, 5, 6, -4, -2, -3],
    ]
    assert is_niggli_reduced(metric(np.array([from_six(s) for s in good])), NIGGLI_EPSILON).all()
    assert not is_niggli_reduced(metric(np.array([from_six(s) for s in bad])), NIGGLI_EPSILON).any()


@pytest.mark.parametrize("number", [500, pytest.param(5000, marks=pytest.mark.slow)])
def test_metric_agrees_with_spglib(number):
    """Outside source: spglib.niggli_reduce. A lattice that misses an equality by 1e-9 to 1e-5 may have two answers."""
    rng = np.random.default_rng(101)
    cells = np.array(
        [
            right_handed(
                unimodular(rng) @ primitive_cell(rng, LATTICE_TYPES[i % 14] if i % 2 else "aP") @ rotation(rng)
            )
            for i in range(number)
        ]
    )
    reduced = reduce(cells)[0]
    plain = is_niggli_reduced(metric(reduced), 1e-9)
    assert plain.mean() > 0.999
    ours = six_of(reduced[plain])
    theirs = six_of(np.array([spglib.niggli_reduce(c, eps=1e-5) for c in cells[plain]]))
    assert (np.abs(ours - theirs).max(axis=1) / np.abs(ours).max(axis=1)).max() < 1e-7


def near_degenerate(rng, kind, noise):
    """A cell close to a higher symmetry, in a random basis."""
    a = rng.uniform(3, 8)
    if kind == "fcc as body-centred tetragonal":
        cell = PRIMITIVE["I"] @ np.diag([a, a, a * np.sqrt(2)])
    elif kind == "hexagonal":
        cell = np.array([[a, 0, 0], [-a / 2, a * np.sqrt(3) / 2, 0], [0, 0, rng.uniform(3, 8)]])
    elif kind == "cubic":
        cell = PRIMITIVE[rng.choice(list("PIF"))] * a
    else:
        cell = primitive_cell(rng, LATTICE_TYPES[rng.integers(14)])
    cell = unimodular(rng) @ (cell * (1 + noise * rng.uniform(-1, 1, (3, 3))) + a * noise * rng.uniform(-1, 1, (3, 3)))
    return right_handed(cell)


@pytest.mark.parametrize("kind", ["fcc as body-centred tetragonal", "hexagonal", "cubic", "any"])
def test_near_degenerate_cells_end(kind):
    rng = np.random.default_rng(102)
    reduce([near_degenerate(rng, kind, 1e-6) for _ in range(1000)], NIGGLI_EPSILON)
    # Noise about the tolerance itself, where equalities are not transitive: a smaller one may be needed.
    reduce([near_degenerate(rng, kind, 10 ** rng.uniform(-9, -2)) for _ in range(1000)])


def test_noise_below_the_tolerance_leaves_one_form():
    """The forms of fcc under noise of 1e-7 agree to the noise: signs are counted, equalities have a tolerance."""
    rng = np.random.default_rng(103)
    cells = np.array([near_degenerate(rng, "fcc as body-centred tetragonal", 1e-7) for _ in range(300)])
    forms = characteristics(at_unit_volume(metric(reduce(cells)[0])))
    assert np.abs(forms - forms[0]).max() < 1e-5


def test_skewed_cells_reduce_to_the_same_metric():
    rng = np.random.default_rng(104)
    for _ in range(50):
        cell = primitive_cell(rng, "aP")
        skewed = cell
        for _ in range(4):
            skewed = unimodular(rng, 5, 1) @ skewed
        out, matrices = reduce(np.array([cell, skewed]))
        assert np.abs(six_of(out[0]) - six_of(out[1])).max() < 1e-7
        assert abs(matrices[1]).max() < 10**6


def test_a_reduced_cell_is_left_alone():
    rng = np.random.default_rng(105)
    cells = reduce([near_degenerate(rng, "any", 10 ** rng.uniform(-9, -4)) for _ in range(300)])[0]
    assert (reduce(cells)[1] == np.eye(3, dtype=int)).all()


def test_steps_agree_with_the_plain_twin():
    rng = np.random.default_rng(106)
    cells = [right_handed(unimodular(rng) @ primitive_cell(rng, t)) for t in LATTICE_TYPES for _ in range(10)]
    twin = six_of(np.array([niggli_steps(c) for c in cells]))
    ours = six_of(reduce(cells)[0])
    assert (np.abs(ours - twin).max(axis=1) / ours.max(axis=1)).max() < 1e-9


def test_number_of_reduced_bases_is_that_of_proper_rotations():
    rng = np.random.default_rng(107)
    for lattice_type in LATTICE_TYPES:
        cell = reduce([right_handed(primitive_cell(rng, lattice_type))])[0][0]
        wanted = 6 if lattice_type == "hR" else PROPER_ROTATIONS[lattice_type[0]]
        assert bases_of(cell, NIGGLI_EPSILON)[1] == wanted, lattice_type


def test_reduced_bases_agree_with_exhaustion():
    rng = np.random.default_rng(108)
    for _ in range(60):
        cell = reduce([near_degenerate(rng, "any", 10 ** rng.uniform(-9, -3))])[0][0]
        found, _ = bases_of(cell, NIGGLI_EPSILON)
        assert (found[0] == np.eye(3)).all()
        assert {tuple(m.ravel().tolist()) for m in found} == all_reduced_bases(cell)
        assert len({tuple(m.ravel().tolist()) for m in found}) == len(found)


def test_the_set_of_reduced_bases_does_not_depend_on_the_start():
    """Also where noise is close to the tolerance and the reduction ends in different cells."""
    rng = np.random.default_rng(109)
    several = 0
    for i in range(200):
        kind = ("fcc as body-centred tetragonal", "hexagonal", "cubic", "any")[i % 4]
        cell = near_degenerate(rng, kind, 10 ** rng.uniform(-7, -4.5))
        starts = [right_handed(unimodular(rng) @ cell) for _ in range(4)]
        ends, _ = reduce(starts)
        several += np.abs(six_of(ends) - six_of(ends)[0]).max() > 1e-9
        sets = []
        for end in ends:
            level = NIGGLI_EPSILON
            found, count = bases_of(np.ascontiguousarray(end), level)
            while count == 0:
                level *= 0.1
                found, count = bases_of(np.ascontiguousarray(end), level)
            assert count > 0
            forms = six_of(found @ end)
            sets.append(forms[np.lexsort(np.round(forms, 8).T)])
        for forms in sets[1:]:
            assert forms.shape == sets[0].shape
            assert np.abs(np.sort(forms, axis=0) - np.sort(sets[0], axis=0)).max() < 1e-9
    assert several > 10  # The case does occur.


def test_very_long_and_flat_cells():
    """Chains and slabs in large boxes: edges from 2.5 to 1000 angstrom."""
    for edges in ([2.5, 1000, 1001], [2.5, 2.6, 1000], [2.5, 30, 1000], [3, 3, 300], [3, 300, 300]):
        cell = right_handed(unimodular(np.random.default_rng(1)) @ np.diag(np.array(edges, float)))
        out, _ = reduce([cell])
        assert np.allclose(np.sort(np.linalg.norm(out[0], axis=1)), np.sort(edges))
        assert bases_of(out[0], NIGGLI_EPSILON)[1] in (4, 8)


def test_lower_triangular_cells():
    rng = np.random.default_rng(110)
    cells = np.array([right_handed(unimodular(rng) @ primitive_cell(rng, t) @ rotation(rng)) for t in LATTICE_TYPES])
    lower, turns = lower_triangular(cells)
    assert np.abs(lower @ turns - cells).max() < 1e-9
    assert (lower[:, [0, 0, 1], [1, 2, 2]] == 0).all() and (lower[:, [0, 1, 2], [0, 1, 2]] > 0).all()
    assert np.allclose(np.linalg.det(turns), 1)


def test_hermite_forms_name_lattices():
    rng = np.random.default_rng(111)
    for _ in range(100):
        m = rng.integers(-4, 5, (3, 3))
        if integer_determinant(m) == 0:
            with pytest.raises(ValueError, match="three dimensions"):
                hermite_rows(m)
            continue
        rows, columns = hermite_rows(m), hermite_columns(m)
        assert (rows == hermite_rows(unimodular(rng) @ m)).all()
        assert (columns == hermite_columns(m @ unimodular(rng))).all()
        assert integer_determinant(rows) == integer_determinant(columns) == abs(integer_determinant(m))
        assert (np.tril(rows, -1) == 0).all() and (np.triu(columns, 1) == 0).all()
        # The same lattice: each is an integer multiple of the other.
        assert np.abs(m @ np.linalg.inv(rows) - np.rint(m @ np.linalg.inv(rows))).max() < 1e-9
