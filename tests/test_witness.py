"""`witness`: one pair proved by hand from what the command writes, or what keeps two apart, with its numbers."""

from __future__ import annotations

import itertools
import json
import math
import subprocess
import sys
from pathlib import Path
from typing import Any

import gemmi
import numpy as np
import pytest

from lattice_census.grouping.candidates import filtered, start_search
from lattice_census.grouping.window import near_window
from lattice_census.output.pair_apart import _first_bound, nearest_lattice_strain
from lattice_census.output.pair_match import batch_of
from lattice_census.output.pair_sides import Side, side_of
from lattice_census.output.witness import examine, witness_text, write_witness
from lattice_census.store.connect import open_for_reading
from lattice_census.store.find import find_record
from lattice_census.tolerances import Tolerances

from .proven_store import labelled_crystals, make_proven_store, run_group
from .tables_of_structures import query
from .test_commands import census

MATCHING = {
    ("k1", "k2"): ("key", "supercell"),
    ("c1", "c-copy"): ("copy", "copy"),
    ("n1", "n2"): ("near", "other_cell"),
    ("r1", "r2"): ("same", "rerun"),
    ("w1", "w2"): ("window", "other_cell"),
    ("c-copy", "c-mirror"): ("near", "mirror"),
    ("c1", "c-double"): ("near", "supercell"),
    ("c-double", "c-triple"): ("near", "supercell"),
    ("c-mirror", "c-triple"): ("near", "mirror"),
}
"""Pairs by label, with the grade and the reason that their making gives them."""


@pytest.fixture(scope="module")
def store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return make_proven_store(tmp_path_factory.mktemp("proven"))


def examined(store: Path, first: str, second: str) -> Any:
    connection = open_for_reading(store)
    try:
        return examine(connection, find_record(connection, f"in:{first}"), find_record(connection, f"in:{second}"))
    finally:
        connection.close()


# By hand --------------------------------------------------------------------------------------------------------------


def reduced_by_hand(side: dict[str, Any]) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """Cell, positions and species of the reduced crystal from the structure as it came and the way back."""
    k = np.array(side["way_back"]["matrix"])
    cell = np.linalg.inv(k) @ np.array(side["given"]["cell_angstrom"]) @ np.array(side["way_back"]["rotation"]).T
    index = abs(round(np.linalg.det(k)))
    count = len(side["given"]["species"]) // index
    positions, species = np.zeros((count, 3)), [""] * count
    for g, token in enumerate(side["given"]["species"]):
        site = side["way_back"]["site_map"][g]
        place = np.array(side["given"]["positions_fractional"][g]) @ k
        positions[site] += (place - side["way_back"]["site_shift"][g] - side["way_back"]["origin_fractional"]) / index
        assert species[site] in ("", token)
        species[site] = token
    return cell, positions, species


def spread_by_hand(
    crystal: tuple[np.ndarray, np.ndarray, list[str]], matrix: np.ndarray
) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """The crystal in its cell `matrix` . cell, sites numbered i |det| + j, cosets by the Hermite form."""
    cell, positions, species = crystal
    index = abs(round(np.linalg.det(matrix)))
    # Diagonal of the Hermite form from the common divisors of minors: d1 = gcd of column 1, d1 d2 = gcd of the minors
    # of columns 1 and 2, d1 d2 d3 = |det|.
    first = math.gcd(*(int(x) for x in matrix[:, 0]))
    minors = [int(matrix[i, 0] * matrix[j, 1] - matrix[i, 1] * matrix[j, 0]) for i, j in ((0, 1), (0, 2), (1, 2))]
    second = math.gcd(*minors) // first
    ranges = [range(first), range(second), range(index // first // second)]
    cosets = list(itertools.product(*ranges))
    sites = [(x + np.array(n)) @ np.linalg.inv(matrix) for x in positions for n in cosets]
    return matrix @ cell, np.array(sites), [t for t in species for _ in cosets]


def measures_by_hand(document: dict[str, Any]) -> dict[str, float]:
    """Everything measured again from the structures as they came, P, Q, shift and pairing."""
    match = document["match"]
    p, q = np.array(match["p_matrix"]), np.array(match["q_matrix"])
    first, u, species_a = spread_by_hand(reduced_by_hand(document["a"]), p)
    second, v, species_b = spread_by_hand(reduced_by_hand(document["b"]), q)
    assert sorted(match["pairing"]) == list(range(len(u))) and len(u) == len(v)
    metric = (first @ first.T + second @ second.T) / 2
    delta = []
    for k, m in enumerate(match["pairing"]):
        assert species_a[k] == species_b[m]
        d = v[m] - u[k] - match["shift_fractional"]
        delta.append(d - np.rint(d))
    delta = np.array(delta)
    assert np.abs(delta.mean(axis=0) @ first).max() < 1e-7
    lengths = np.sqrt([d @ metric @ d for d in delta])
    logs = np.log(np.linalg.svd(np.linalg.inv(first) @ second)[1])
    orthogonal = np.array(match["orthogonal"])
    assert np.abs(orthogonal @ orthogonal.T - np.eye(3)).max() < 1e-9
    assert (np.linalg.det(orthogonal) < 0) == match["improper"]
    assert np.abs(first @ orthogonal - second).max() < 2 * np.abs(logs).max() * np.abs(second).max() + 1e-6
    return {
        "largest_shift_angstrom": lengths.max(),
        "rms_shift_angstrom": math.sqrt((lengths**2).mean()),
        "strain": np.abs(logs).max(),
        "shape_strain": np.abs(logs - logs.mean()).max(),
    }


def read_cif(path: Path) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """Cell, positions and species of a CIF, by gemmi."""
    small = gemmi.make_small_structure_from_block(gemmi.cif.read(str(path)).sole_block())
    cell = np.array(small.cell.orth.mat.tolist()).T
    return cell, np.array([s.fract.tolist() for s in small.sites]), [s.element.name for s in small.sites]


@pytest.mark.parametrize("pair", MATCHING)
def test_the_largest_shift_is_rebuilt_by_hand(tmp_path: Path, store: Path, pair: tuple[str, str]):
    found = examined(store, *pair)
    write_witness(found, tmp_path / "out")
    document = json.loads((tmp_path / "out" / "witness.json").read_text())
    match = document["match"]
    assert (match["grade"], match["reason"]) == MATCHING[pair]
    assert match["mirrored"] == (match["reason"] == "mirror")
    # The structures as they came are those that were written into the input.
    for name, label in zip("ab", pair, strict=True):
        cell, positions, tokens = labelled_crystals()[label]
        given = document[name]["given"]
        assert given["species"] == tokens
        g = np.array(given["cell_angstrom"])
        assert np.allclose(g @ g.T, cell @ cell.T, atol=1e-9)
        hand = np.sign(np.linalg.det(cell))  # a CIF describes the right-handed basis -cell, with -positions
        apart = np.array(given["positions_fractional"]) - hand * positions
        assert np.abs(apart - np.rint(apart)).max() < 1e-9
    for name, value in measures_by_hand(document).items():
        assert value == pytest.approx(match[name], abs=2e-6), name
    # Site k of a.cif stands by site k of b.cif, in one origin and cell.
    (cell_a, x, species_a), (cell_b, y, species_b) = (read_cif(tmp_path / "out" / f"{n}.cif") for n in "ab")
    assert species_a == species_b
    apart = y - x
    apart -= np.rint(apart)
    metric = (cell_a @ cell_a.T + cell_b @ cell_b.T) / 2
    distances = np.sqrt(np.einsum("ni,ij,nj->n", apart, metric, apart))
    assert distances.max() == pytest.approx(match["largest_shift_angstrom"], abs=1e-6)
    assert distances.tolist() == pytest.approx(match["common_cell"]["distances_angstrom"], abs=1e-6)
    assert np.abs(cell_a - cell_b).max() < 0.1
    note = (tmp_path / "out" / "b.cif").read_text()
    assert ("mirror image of this record" in note) == match["improper"]


def test_known_shifts(store: Path):
    """One site of four moved by d along x is shifted by 3/4 d once the mean is removed."""
    for pair, distance in {("r1", "r2"): 0.004, ("n1", "n2"): 0.04, ("w1", "w2"): 0.08}.items():
        assert examined(store, *pair).match.largest_shift == pytest.approx(0.75 * distance, abs=1e-6)


def test_a_noisy_double_and_a_noisy_triple_cell_meet_in_six(store: Path):
    match = examined(store, "c-double", "c-triple").match
    assert abs(round(np.linalg.det(match.p_matrix))) == 3 and abs(round(np.linalg.det(match.q_matrix))) == 2
    assert len(match.pairing) == 24


def test_the_measures_are_those_of_the_store_whichever_comes_first(store: Path):
    connection = open_for_reading(store)
    columns = "largest_shift_angstrom, rms_shift_angstrom, strain, shape_strain, volume_ratio, mirrored, reason"
    rows = query(store, f"SELECT record_a, record_b, p_matrix, q_matrix, {columns} FROM matches")
    assert len(rows) >= 8
    for a, b, p, q, *measures in rows:
        one, other = examine(connection, a, b).match, examine(connection, b, a).match
        for match in (one, other):
            assert match is not None
            got = [match.largest_shift, match.rms_shift, match.strain, match.shape_strain, match.volume_ratio]
            assert got == pytest.approx(measures[:5], abs=1e-9)
            assert [match.mirrored, match.reason] == measures[5:]
        assert one.p_matrix.ravel().tolist() == list(p) == other.q_matrix.ravel().tolist()
        assert one.q_matrix.ravel().tolist() == list(q) == other.p_matrix.ravel().tolist()
    connection.close()


# What keeps two records apart -----------------------------------------------------------------------------------------


def test_another_composition(store: Path):
    found = examined(store, "k1", "n1")
    assert found.match is None and found.apart.cause == "composition"
    assert "Cl K" in witness_text(found, 20) and "Ga N" in witness_text(found, 20)


def test_a_volume_beyond_the_strain(store: Path):
    apart = examined(store, "c1", "c-large").apart
    assert apart.cause == "volume"
    assert apart.value == pytest.approx(1.02**3, abs=1e-9) and apart.limit == pytest.approx(math.exp(0.045))
    assert apart.closest.strain == pytest.approx(math.log(1.02), abs=1e-9) and apart.closest.largest_shift < 1e-6


def test_a_strained_lattice(store: Path):
    apart = examined(store, "c1", "c-strained").apart
    assert apart.cause in ("means", "columns", "rows", "lattice") and apart.value > apart.limit
    assert apart.closest.strain == pytest.approx(0.02, abs=1e-9)


def test_a_site_too_far(store: Path):
    apart = examined(store, "c1", "c-farther").apart
    assert apart.closest.largest_shift == pytest.approx(0.75 * 0.13, abs=1e-6)
    if apart.cause == "shift":
        assert (apart.value, apart.limit) == (apart.closest.largest_shift, pytest.approx(0.075))
    else:
        assert apart.value > apart.limit
    assert "closest match" in witness_text(examined(store, "c1", "c-farther"), 3)


def test_a_shift_that_no_bound_rules_out():
    """Two homometric sets are equal in every distance, and have one lattice: only the pairing tells them apart."""
    from lattice_census.output.pair_apart import what_keeps_apart

    from .test_groups import sites_24d

    sides = [side_by_hand(sites_24d(u)) for u in (0.03, -0.03)]
    apart = what_keeps_apart(*sides, Tolerances(), "merge")
    assert apart.cause == "shift" and apart.limit == pytest.approx(0.075)
    assert apart.value is None or apart.value == apart.closest.largest_shift > apart.limit
    assert apart.searched_strain == pytest.approx(0.015)


def side_by_hand(crystal: Any) -> Side:
    """A crystal whose cell is its reduced one, as a record."""
    cell, positions, tokens = crystal
    zero = np.zeros((len(tokens), 3), np.int64)
    return Side(
        "0" * 20, "s", "x", "f", "Mn", "Mn", 3, "", str(positions[0]), cell, tokens, positions, cell, tokens, positions,
        np.eye(3, dtype=np.int64), np.eye(3), np.zeros(3), np.arange(len(tokens)), zero, 0.0,
    )  # fmt: skip


def test_a_bound_that_rules_out_says_the_limit(store: Path):
    apart = examined(store, "c1", "c-moved").apart
    assert apart.cause in ("means", "columns", "rows") and apart.value > apart.limit
    assert apart.limit == pytest.approx(0.015, abs=1e-5)


def test_the_bounds_in_numpy_say_what_the_filter_says(store: Path):
    """Twin of the compiled filter, over all pairs of one composition."""
    connection = open_for_reading(store)
    ids = query(store, "SELECT record_id FROM records WHERE composition = 'O Si' ORDER BY record_id")
    sides = [side_of(connection, i) for (i,) in ids]
    connection.close()
    ruled_out = 0
    for a, b in itertools.combinations(sides, 2):
        search = start_search(batch_of(a, b), near_window(Tolerances()))
        left = filtered(search.prepared, search.coordinates, np.array([[0, 1]]), search.slack)
        assert (_first_bound(a, b, search) is None) == (len(left) == 1), (a.label, b.label)
        ruled_out += not len(left)
    assert 5 < ruled_out < len(sides) * (len(sides) - 1) / 2


def test_the_nearest_lattice():
    cell = np.array([[3.0, 0, 0], [0.4, 4.0, 0], [0.3, 0.5, 5.0]])
    assert nearest_lattice_strain(cell, cell) == pytest.approx(0, abs=1e-12)
    turned = np.array([[0, -1, 0], [1, 0, 0], [1, 0, 1]]) @ cell @ np.diag(np.exp([0.03, -0.02, 0.01]))
    assert nearest_lattice_strain(cell, turned) <= 0.03 + 1e-9
    assert nearest_lattice_strain(cell, turned) > 0.01
    assert nearest_lattice_strain(cell, 2 * cell) == math.inf
    assert nearest_lattice_strain(cell, cell, planar=True) == pytest.approx(0, abs=1e-12)


def test_mirror_images_kept_apart(tmp_path: Path):
    store = make_proven_store(tmp_path)
    run_group(store, recompute=True, mirror_images="separate")
    found = examined(store, "c1", "c-mirror")
    assert found.match.grade is None and found.match.mirrored
    assert "keeps apart" in witness_text(found, 5)


# The command ----------------------------------------------------------------------------------------------------------


def test_the_command(tmp_path: Path, store: Path):
    at = ("--store", str(store))
    done = census("witness", "in:n1", "in:n2", *at, "--rows", "3", "--out", "proof", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "They are one crystal at grade near." in done.stdout and "(3 shown)" in done.stdout
    assert "largest shift    0.030000 Å" in done.stdout
    assert "In the store: copy two families, key two families, same two families, near one group" in done.stdout
    assert sorted(p.name for p in tmp_path.iterdir()) == ["proof"]
    assert sorted(p.name for p in (tmp_path / "proof").iterdir()) == ["a.cif", "b.cif", "witness.json"]
    again = census("witness", "in:n1", "in:n2", *at, "--out", "proof", cwd=tmp_path)
    assert again.returncode == 2 and "exists already" in again.stderr
    told = json.loads(census("witness", "in:n1", "in:n2", *at, "--json", cwd=tmp_path).stdout)
    assert told == json.loads((tmp_path / "proof" / "witness.json").read_text())
    for arguments, message in {
        ("in:n1", "in:n1"): "Give two records",
        ("in:n1", "in:none"): "has no record",
        ("in:n1", "n2"): "names no record",
    }.items():
        done = census("witness", *arguments, *at, cwd=tmp_path)
        assert done.returncode == 2 and message in done.stderr


def test_the_farthest_sites_come_first_and_are_numbered_from_1(store: Path):
    found = examined(store, "c1", "c-double")
    lines = witness_text(found, 100).splitlines()
    start = next(i for i, line in enumerate(lines) if line.startswith("---")) + 1
    table = [line.split("  ") for line in lines[start : start + len(found.match.pairing)]]
    distances = [float(line[-1]) for line in table]
    assert distances == sorted(distances, reverse=True)
    numbers = sorted(int(next(filter(None, line))) for line in table)
    assert numbers == list(range(1, len(found.match.pairing) + 1))


def test_another_composition_needs_no_kernels(tmp_path: Path, store: Path):
    code = (
        f"import sys; sys.argv = ['lattice-census', 'witness', 'in:k1', 'in:n1', '--store', {str(store)!r}]\n"
        "from lattice_census.flows.cli import main\n"
        "try: main()\nexcept SystemExit as e: assert not e.code, e.code\n"
        "print([m for m in ('prefect', 'numba', 'scipy', 'matplotlib') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=tmp_path)
    assert "composition" in done.stdout and done.stdout.endswith("[]\n"), done.stderr
