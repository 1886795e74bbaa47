"""Lattice types by the metric alone: the 44 characters, noise, other programs, the ladder, and the slow twin."""

from __future__ import annotations

import csv
import itertools
from pathlib import Path

import gemmi
import moyopy
import numba
import numpy as np
import pytest
import spglib

from lattice_census.cell.lattice_type import LADDER_REACH, classify_lattices
from lattice_census.kernels import holohedry
from lattice_census.kernels.automorphisms import MAX_AXES, two_fold_axes
from lattice_census.kernels.lattice_type import RANK
from lattice_census.lattice import bravais
from lattice_census.lattice.bravais import ALL_TYPES, HOLOHEDRY_ORDER, LATTICE_TYPES, normal_symbol
from lattice_census.lattice.conventional import family_mismatch, is_conventional
from lattice_census.tolerances import Tolerances

from . import strategies

EXACT = Tolerances(lattice_strain_tolerance=1e-7)
DEFAULT = Tolerances()


def reduced_right(cell):
    """A short right-handed basis of the lattice."""
    cell = strategies.reduced(np.asarray(cell, float))
    return cell if np.linalg.det(cell) > 0 else -cell


def types_of(cells, tolerances=EXACT, periodicity=None):
    return classify_lattices(np.array(cells), tolerances, periodicity).symbols


def ladder_of(cell, symbol, tolerances=EXACT):
    found = classify_lattices(np.asarray(cell, float)[None], tolerances)
    return float(found.ladder[0, ALL_TYPES.index(symbol)])


# --- tables


def test_codes_of_the_kernels_follow_the_table():
    names = ("AP", "MP", "MS", "OP", "OS", "OI", "OF", "TP", "TI", "HR", "HP", "CP", "CI", "CF")
    assert [LATTICE_TYPES[getattr(holohedry, n)].upper() for n in names] == list(names)
    assert [HOLOHEDRY_ORDER[t] for t in LATTICE_TYPES] == RANK.tolist()
    families = {-1: "am", 0: "o", 1: "t", 2: "h", 3: "c"}
    assert all(t[0] in families[int(f)] for t, f in zip(LATTICE_TYPES, holohedry.FAMILY, strict=True))
    assert set(bravais.CONVENTIONAL_SETTING) == set(HOLOHEDRY_ORDER) == set(ALL_TYPES)


def test_symbols_with_a_named_centred_face_become_s():
    assert [normal_symbol(s) for s in ("mC", "mI", "oA", "oC8", "oI", "oF", "hR")] == [
        "mS", "mS", "oS", "oS8", "oI", "oF", "hR",
    ]  # fmt: skip


# --- the 44 lattice characters (International Tables A, table 3.1.3.1; values from memory)


def characters():
    with (Path(__file__).parent / "tables" / "lattice_characters.csv").open(encoding="utf-8") as f:
        return list(csv.DictReader(f))


def equations(conditions: str) -> tuple[np.ndarray, int]:
    """Linear equations (k, 6) in A ... F of a row of the table, and the sign of its type (+1: D, E, F > 0)."""
    sign = 1 if "type I " in conditions else -1
    rows = []
    for part in conditions.replace(" and ", ";").split(";"):
        if "=" not in part or "type" in part:
            continue
        terms = [t.strip() for t in part.split("=")]
        for left, right in itertools.pairwise(terms):
            row = np.zeros(6)
            for side, s in ((left, 1.0), (right, -1.0)):
                if "|" in side:  # Only in type II, where what stands between the bars is negative.
                    factor, inside = side.split("|")[:2]
                    s *= -float(factor or 1)
                    side = inside
                for term in side.replace("-", "+-").split("+"):
                    term = term.strip()
                    if term in ("", "0"):
                        continue
                    t = -s if term.startswith("-") else s
                    term = term.lstrip("-")
                    if "/" in term:
                        term, divisor = term.split("/")
                        t /= float(divisor)
                    if term[0].isdigit():
                        t, term = t * float(term[0]), term[1:]
                    row["ABCDEF".index(term)] += t
            rows.append(row)
    return np.array(rows).reshape(-1, 6), sign


def cells_of_character(rng, row, count):
    """Random Niggli cells that satisfy the equations of a row, as (count, 3, 3) cells."""
    m, sign = equations(row["conditions"])
    project = np.eye(6) - np.linalg.pinv(m) @ m if len(m) else np.eye(6)
    out = []
    while len(out) < count:
        x = np.empty((4000, 6))
        x[:, :3] = np.sort(rng.uniform(9, 60, (4000, 3)), axis=1)
        a, b = x[:, 0], x[:, 1]
        x[:, 3:] = sign * rng.random((4000, 3)) * 0.5 * np.stack([b, a, a], axis=1)
        x = x @ project
        a, b, c, d, e, f = x.T
        tiny = 1e-9 * c
        good = (a > 4) & (a <= b + tiny) & (b <= c + tiny)
        good &= (abs(d) <= b / 2 + tiny) & (abs(e) <= a / 2 + tiny) & (abs(f) <= a / 2 + tiny)
        good &= (sign * x[:, 3:] >= -tiny[:, None]).all(axis=1)
        if sign < 0:
            good &= 2 * abs(d + e + f) <= a + b + tiny
        else:
            good &= (x[:, 3:] > 0.02 * c[:, None]).all(axis=1)
        g = np.array([[a, f, e], [f, b, d], [e, d, c]]).transpose(2, 0, 1)
        good &= np.linalg.det(g) > 0.05 * a * b * c
        out += [np.linalg.cholesky(metric) for metric in g[good]]
    return out[:count]


@pytest.mark.parametrize("row", characters(), ids=lambda r: r["row"])
def test_lattice_characters(row):
    rng = np.random.default_rng(int(row["row"]))
    wanted = normal_symbol(row["bravais"])
    cells = [reduced_right(strategies.unimodular(rng) @ c) for c in cells_of_character(rng, row, 60)]
    found = classify_lattices(np.array(cells), EXACT)
    assert found.symbols == [wanted] * 60
    assert set(found.holohedry_orders.tolist()) == {int(row["holohedry_order"])}
    assert set(np.round(np.linalg.det(found.matrices)).astype(int).tolist()) == {bravais.multiplicity(wanted)}


def random_lattices(seed, count):
    rng = np.random.default_rng(seed)
    wanted = [LATTICE_TYPES[i % 14] for i in range(count)]
    return wanted, [reduced_right(strategies.unimodular(rng) @ strategies.primitive_cell(rng, t)) for t in wanted]


@pytest.mark.parametrize("count", [1400, pytest.param(10_000, marks=pytest.mark.slow)])
def test_random_lattices_of_all_types(count):
    wanted, cells = random_lattices(count, count)
    assert types_of(cells) == wanted


def test_given_basis_does_not_matter():
    rng = np.random.default_rng(5)
    wanted, cells = random_lattices(5, 140)
    skewed = [strategies.unimodular(rng, 3, 1) @ c for c in cells]
    a, b = classify_lattices(np.array(cells), DEFAULT), classify_lattices(np.array(skewed), DEFAULT)
    assert a.symbols == b.symbols
    np.testing.assert_allclose(a.ladder, b.ladder, atol=1e-9)


NEAR_DEGENERATE = {
    # fcc and hcp lattices fall into several reduced forms under noise; 4,16,16,16,3,4 has five Buerger cells.
    "cF": strategies.PRIMITIVE["F"] * 4.0,
    "cI": strategies.PRIMITIVE["I"] * 4.0,
    "cP": np.eye(3) * 4.0,
    "hP": strategies.cell_from_parameters(3, 3, 5, 90, 90, 120),
    "tI": strategies.PRIMITIVE["I"] @ np.diag([4, 4, 4 * np.sqrt(2) * 1.1]),
    "hR": strategies.PRIMITIVE["R"] @ strategies.cell_from_parameters(3, 3, 3 * np.sqrt(6) * 1.02, 90, 90, 120),
    "aP": np.linalg.cholesky(np.array([[4, 2, 1.5], [2, 16, 8], [1.5, 8, 16]])),
}


@pytest.mark.parametrize("symbol", NEAR_DEGENERATE)
def test_noise_gives_one_type(symbol):
    rng = np.random.default_rng(17)
    cells = []
    for _ in range(1000):
        noisy = NEAR_DEGENERATE[symbol] @ (np.eye(3) + rng.uniform(-1e-6, 1e-6, (3, 3)))
        cells.append(reduced_right(strategies.unimodular(rng, 3) @ noisy))
    found = classify_lattices(np.array(cells), DEFAULT)
    assert set(found.symbols) == {symbol}
    ladder = found.ladder
    assert (np.isnan(ladder).all(axis=0) | ~np.isnan(ladder).any(axis=0)).all()
    spread = np.nan_to_num(ladder).max(axis=0) - np.nan_to_num(ladder).min(axis=0)
    assert spread.max() < 1e-5


# --- other programs, on crystals of one site


def bravais_of_one_site(cell) -> dict[str, str]:
    number = spglib.get_symmetry_dataset((cell, [[0, 0, 0]], [1]), symprec=1e-6).number
    moyo = moyopy.MoyoDataset(moyopy.Cell(cell.tolist(), [[0.0, 0.0, 0.0]], [1]), symprec=1e-6).number
    name = {k: normal_symbol(str(moyopy.SpaceGroupType(n).bravais_class)) for k, n in (("s", number), ("m", moyo))}
    return {"spglib": name["s"], "moyopy": name["m"]}


def test_against_spglib_moyopy_and_gemmi():
    wanted, cells = random_lattices(23, 280)
    found = classify_lattices(np.array(cells), EXACT)
    for symbol, order, cell in zip(found.symbols, found.holohedry_orders, cells, strict=True):
        assert bravais_of_one_site(cell) == {"spglib": symbol, "moyopy": symbol}
        lengths = np.linalg.norm(cell, axis=1)
        cosines = [cell[i] @ cell[j] / lengths[i] / lengths[j] for i, j in ((1, 2), (0, 2), (0, 1))]
        unit = gemmi.UnitCell(*lengths, *np.degrees(np.arccos(cosines)))
        # gemmi lists the proper rotations of the lattice within an obliquity in degrees (Le Page 1982).
        assert 2 * len(list(gemmi.find_lattice_symmetry(unit, "P", 1e-3))) == order
    assert found.symbols == wanted


# --- ladder


def test_cubic_by_one_edge():
    assert ladder_of(np.diag([4, 4, 4.04]), "cP") == pytest.approx(np.log(1.01) * 2 / 3, abs=1e-12)
    assert types_of([np.diag([4, 4, 4.04])], DEFAULT) == ["tP"]
    assert types_of([np.diag([4, 4, 4.017])], DEFAULT) == ["cP"]
    assert types_of([np.diag([4, 4, 4.019])], DEFAULT) == ["tP"]


def strain_against(rng, family: str, size: float) -> np.ndarray:
    """A symmetric logarithmic strain without any part that the family allows, of largest principal value `size`."""
    e = rng.normal(size=(3, 3))
    e = e + e.T
    d = np.diag(e).copy()
    if family == "m":
        e[0, 2] = e[2, 0] = 0
        d[:] = 0
    elif family == "o":
        d[:] = 0
    elif family in "th":
        d = np.array([1.0, -1.0, 0.0]) * (d[0] - d[1]) / 2
    else:
        d -= d.mean()
    np.fill_diagonal(e, d)
    return e * size / np.abs(np.linalg.eigvalsh(e)).max()


def stretched(cell, strain):
    values, vectors = np.linalg.eigh(strain)
    return cell @ vectors @ np.diag(np.exp(values)) @ vectors.T


@pytest.mark.parametrize("symbol", [t for t in LATTICE_TYPES if t != "aP"])
@pytest.mark.parametrize("size", [1e-4, 5e-3, 2e-2])
def test_known_strain_comes_back(symbol, size):
    rng = np.random.default_rng(len(symbol) + int(size * 1e5))
    for _ in range(10):
        conventional = strategies.conventional_cell(rng, symbol)
        strain = strain_against(rng, symbol[0], size)
        ideal = strategies.PRIMITIVE[symbol[1]]
        cell = reduced_right(strategies.unimodular(rng, 3) @ ideal @ stretched(conventional, strain))
        found = classify_lattices(cell[None], EXACT)
        assert found.holohedry_orders[0] < HOLOHEDRY_ORDER[symbol]
        given = found.ladder[0, ALL_TYPES.index(symbol)]
        # Another lattice of the type may lie nearer than the one that was strained; never farther.
        assert given <= size * (1 + 1e-9) + 1e-12
        if size <= 5e-3:
            assert given == pytest.approx(size, rel=1e-6)


def test_ladder_names_higher_types_only_and_within_reach():
    wanted, cells = random_lattices(31, 280)
    found = classify_lattices(np.array(cells), DEFAULT)
    for symbol, row, reach in zip(found.symbols, found.ladder, found.ladder_reach, strict=True):
        for other, value in zip(ALL_TYPES, row, strict=True):
            if not np.isnan(value):
                assert HOLOHEDRY_ORDER[other] > HOLOHEDRY_ORDER[symbol]
                assert DEFAULT.lattice_strain_tolerance < value <= reach <= LADDER_REACH
    frame = found.frame()
    assert frame.columns == ["lattice_type", "lattice_strain", "ladder_reach"] + [
        f"ladder_{t}" for t in bravais.LADDER_TYPES
    ]
    assert frame["ladder_cP"].null_count() == int(np.isnan(found.ladder[:, ALL_TYPES.index("cP")]).sum())


def test_very_long_and_very_flat_cells():
    cells = [np.diag([3, 3, 900]), np.diag([3, 900, 900]), np.diag([0.9, 3, 900]), np.diag([3, 3, 60])]
    found = classify_lattices(np.array(cells, float), DEFAULT)
    assert found.symbols == ["tP", "tP", "oP", "tP"]
    assert (found.ladder_reach[:3] < LADDER_REACH).all()


# --- facts of the trade (common practice, no source)


def test_facts_of_the_trade():
    square = np.array([[4.0, 0, 0], [2, 2, 0], [0, 0, 20]])
    assert types_of([reduced_right(square)], EXACT, np.array([2], np.uint8)) == ["tp"]
    base_centred = np.array([[2.0, 2, 0], [-2, 2, 0], [0, 0, 5]])
    face_centred = strategies.PRIMITIVE["F"] @ np.diag([4.0, 4.0, 5.0])
    rock_salt = strategies.PRIMITIVE["F"] * 5.64
    assert types_of([reduced_right(c) for c in (base_centred, face_centred, rock_salt)]) == ["tP", "tI", "cF"]
    found = classify_lattices(reduced_right(face_centred)[None], EXACT)
    lengths = np.linalg.norm(found.conventional_cells[0], axis=1)
    np.testing.assert_allclose(lengths, [4 / np.sqrt(2), 4 / np.sqrt(2), 5])


# --- conventional cells


def test_conventional_cells():
    wanted, cells = random_lattices(41, 560)
    cells = np.array(cells)
    found = classify_lattices(cells, EXACT)
    assert is_conventional(found.conventional_cells, found.matrices, found.codes, 1e-7).all()
    np.testing.assert_allclose(found.conventional_cells, found.matrices @ cells)
    for symbol, cell, given in zip(found.symbols, found.conventional_cells, cells, strict=True):
        # The same points: the given vectors are integer combinations of the centred conventional cell's.
        centred = strategies.PRIMITIVE[symbol[1]] @ cell
        change = given @ np.linalg.inv(centred)
        np.testing.assert_allclose(change, np.round(change), atol=1e-9)
        assert round(abs(np.linalg.det(change))) == 1
        a, b, c = np.linalg.norm(cell, axis=1)
        cosine = {"alpha": cell[1] @ cell[2] / b / c, "beta": cell[0] @ cell[2] / a / c, "gamma": cell[0] @ cell[1]}
        if symbol[0] == "m":
            assert cosine["beta"] <= 1e-12 and abs(cosine["alpha"]) < 1e-9
        if symbol in ("mP", "oP", "oI", "oF"):
            assert a <= c * (1 + 1e-12)
        if symbol == "oS":
            assert a <= b * (1 + 1e-12)
        if symbol[0] == "h":
            assert cosine["gamma"] == pytest.approx(-a * b / 2, rel=1e-6)


def test_monoclinic_cells_are_the_shortest_of_their_setting():
    rng = np.random.default_rng(43)
    for symbol in ("mP", "mS"):
        for _ in range(40):
            cell = reduced_right(strategies.primitive_cell(rng, symbol))
            found = classify_lattices(cell[None], EXACT).conventional_cells[0]
            steps = np.array([v for v in itertools.product(range(-4, 5), repeat=2) if v != (0, 0)])
            plane = steps @ found[[0, 2]]
            basis = np.abs(steps[:, None, 0] * steps[None, :, 1] - steps[:, None, 1] * steps[None, :, 0]) == 1
            if symbol == "mS":
                half = 0.5 * (plane + found[1]) @ np.linalg.inv(cell)
                basis &= (np.abs(half - np.round(half)).max(axis=1) < 1e-6)[:, None]
            squares = (plane**2).sum(axis=1)
            best = (squares[:, None] + squares[None, :])[basis].min()
            assert found[0] @ found[0] + found[2] @ found[2] == pytest.approx(best)


def test_predicate_refuses():
    wanted, cells = random_lattices(47, 140)
    found = classify_lattices(np.array(cells), EXACT)
    matrices = found.matrices.copy()
    matrices[:, 0] += matrices[:, 1]
    sheared = is_conventional(matrices @ np.array(cells), matrices, found.codes, 1e-7)
    assert not sheared[found.holohedry_orders >= 8].any()
    doubled = found.matrices * 2
    assert not is_conventional(doubled @ np.array(cells), doubled, found.codes, 1e-7).any()
    assert family_mismatch(np.diag([4, 4, 4.04])[None], "c")[0] == pytest.approx(np.log(1.01) * 2 / 3, abs=1e-6)
    with pytest.raises(ValueError, match="right-handed"):
        classify_lattices(-np.eye(3)[None], EXACT)


# --- layers


def layer(rng, symbol):
    a, b = rng.uniform(3, 4), rng.uniform(4.5, 6)
    if symbol == "mp":
        plane = np.array([[a, 0], [a * rng.uniform(0.1, 0.4), b]])
    elif symbol == "op":
        plane = np.diag([a, b])
    elif symbol == "oc":
        plane = np.array([[a, b], [-a, b]]) / 2
    elif symbol == "tp":
        plane = np.eye(2) * a
    else:
        plane = np.array([[a, 0], [-a / 2, a * np.sqrt(0.75)]])
    cell = np.zeros((3, 3))
    change = np.array([[1, rng.integers(-2, 3)], [0, 1]])
    cell[:2, :2] = change @ plane
    cell[2] = [rng.uniform(-2, 2), rng.uniform(-2, 2), rng.uniform(5, 20)]
    return cell @ strategies.rotation(rng)


def test_layers():
    rng = np.random.default_rng(53)
    wanted = [bravais.LAYER_TYPES[i % 5] for i in range(500)]
    cells = np.array([layer(rng, t) for t in wanted])
    found = classify_lattices(cells, EXACT, np.full(500, 2, np.uint8))
    assert found.symbols == wanted
    assert (found.matrices[:, 2] == [0, 0, 1]).all() and (found.matrices[:, :2, 2] == 0).all()
    assert (np.linalg.det(found.matrices) > 0).all()
    square = np.array([[4.0, 0, 0], [0, 4.04, 0], [0, 0, 4]])
    found = classify_lattices(square[None], DEFAULT, np.array([2], np.uint8))
    assert found.symbols == ["op"]
    assert found.ladder[0, ALL_TYPES.index("tp")] == pytest.approx(np.log(1.01) / 2, abs=1e-12)
    assert np.isnan(found.ladder[0, : len(LATTICE_TYPES)]).all()


# --- the slow twin of the kernels


@numba.njit
def axes_of(metric, inverse, reach, axes, strains):
    return two_fold_axes(metric, inverse, reach, axes, strains)


def plain_axes(metric, reach, largest=4):
    """Two-fold rotations within reach, by running through all vectors with entries to `largest`: {matrix: strain}."""
    box = np.array(list(itertools.product(range(-largest, largest + 1), repeat=3)))
    box = box[np.gcd.reduce(box, axis=1) == 1]
    half = box[[tuple(v) > (0, 0, 0) for v in box]]
    found = {}
    inverse = np.linalg.inv(metric)
    for t in half:
        k = box @ t
        for u in box[(k == 1) | (k == 2)]:
            product = np.sqrt((t @ metric @ t) * (u @ inverse @ u))
            strain = np.arcsinh(np.sqrt(max((product / (u @ t)) ** 2 - 1, 0))) / 2
            if strain <= reach:
                m = 2 * np.outer(u, t) // (u @ t) - np.eye(3, dtype=int)
                found[tuple(m.ravel())] = strain
    return found


def geometric_mean(metrics):
    """Karcher mean of symmetric positive matrices by the usual fixed-point iteration."""
    mean = metrics.mean(axis=0)
    for _ in range(30):
        w, v = np.linalg.eigh(mean)
        root, back = v @ np.diag(w**0.5) @ v.T, v @ np.diag(w**-0.5) @ v.T
        w, v = np.linalg.eigh(back @ metrics @ back)
        step = np.einsum("nij,nj,nkj->nik", v, np.log(w), v).mean(axis=0)
        w, v = np.linalg.eigh(step)
        mean = root @ v @ np.diag(np.exp(w)) @ v.T @ root
        if np.abs(step).max() < 1e-13:
            break
    return mean


def closure(generators):
    """The group of integer matrices that the generators span, or None beyond 24 elements."""
    group = {tuple(np.eye(3, dtype=int).ravel())}
    fresh = list(group)
    while fresh:
        new = []
        for g in fresh:
            for h in generators:
                m = tuple((np.array(g).reshape(3, 3) @ h).ravel())
                if m not in group:
                    if len(group) == 24:
                        return None
                    group.add(m)
                    new.append(m)
        fresh = new
    return np.array(sorted(group)).reshape(-1, 3, 3)


def plain_ladder(cell, reach):
    """{type: strain}: for every group that up to three two-fold rotations span, the mean of the metric's images, its
    type by spglib on a crystal of one site, and the strain to it."""
    metric = cell @ cell.T
    twofold = [np.array(m).reshape(3, 3) for m in plain_axes(metric, reach)]
    groups = {}
    for size in (1, 2, 3):
        for generators in itertools.combinations(twofold, size):
            group = closure(generators)
            if group is not None:
                groups[tuple(group.ravel())] = group
    ladder = {}
    for group in groups.values():
        mean = geometric_mean(group @ metric @ np.swapaxes(group, 1, 2))
        strain = np.abs(np.log(np.linalg.eigvals(np.linalg.solve(mean, metric)).real)).max() / 2
        if strain <= reach:
            symbol = bravais_of_one_site(np.linalg.cholesky(mean))["spglib"]
            ladder[symbol] = min(strain, ladder.get(symbol, np.inf))
    return ladder


@pytest.mark.parametrize("symbol", ["aP", "mS", "oF", "tI", "hR", "hP", "cP", "cI", "cF"])
def test_axes_equal_the_slow_twin(symbol):
    rng = np.random.default_rng(59)
    for _ in range(3):
        cell = reduced_right(strategies.primitive_cell(rng, symbol) @ (np.eye(3) + rng.normal(size=(3, 3)) * 0.02))
        metric = cell @ cell.T
        axes, strains = np.empty((MAX_AXES, 7), np.int64), np.empty(MAX_AXES)
        n = axes_of(metric, np.linalg.inv(metric), 0.08, axes, strains)
        found = {}
        for row, strain in zip(axes[:n], strains[:n], strict=True):
            assert row[:3] @ row[3:6] == row[6] > 0
            found[tuple((2 * np.outer(row[3:6], row[:3]) // row[6] - np.eye(3, dtype=int)).ravel())] = strain
        wanted = plain_axes(metric, 0.08)
        assert len(found) == n and found.keys() == wanted.keys()
        for m, strain in wanted.items():
            assert found[m] == pytest.approx(strain, abs=1e-7)


@pytest.mark.parametrize("symbol", ["mP", "oS", "oI", "tP", "tI", "hR", "hP", "cP", "cI", "cF"])
def test_ladder_equals_the_slow_twin(symbol):
    rng = np.random.default_rng(61)
    cell = reduced_right(strategies.primitive_cell(rng, symbol) @ (np.eye(3) + rng.normal(size=(3, 3)) * 0.01))
    reach = 0.04
    found = classify_lattices(cell[None], EXACT)
    assert found.symbols == ["aP"]
    ladder = {t: v for t, v in zip(ALL_TYPES, found.ladder[0], strict=True) if v <= reach}
    wanted = plain_ladder(cell, reach)
    assert symbol in wanted
    assert ladder.keys() == wanted.keys()
    for t, strain in wanted.items():
        assert ladder[t] == pytest.approx(strain, abs=1e-8)
