"""Families and groups: the recognition exams, the crystals that must stay apart, and the grouping against brute
force."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.errors import UsageError
from lattice_census.grouping.composition import Grouping, Options, group_composition
from lattice_census.grouping.graph import components, similarity_graph, spanning_forest, weak_links
from lattice_census.grouping.groups import stars
from lattice_census.grouping.reasons import reasons
from lattice_census.grouping.verification import match
from lattice_census.grouping.window import near_window
from lattice_census.tolerances import Tolerances

from . import strategies as draw
from .invariants import check_grouping, check_matches
from .slow_match import slow_match
from .test_candidates import canonical, stacked

T = Tolerances()


def group(crystals, tolerances=T, options=None, rank=None) -> Grouping:
    """Group crystals as they come; ids r000, r001, ... in order."""
    result = canonicalise(draw.batch(crystals), T)
    assert not result.refusals
    ids = [f"r{i:04d}" for i in range(len(crystals))]
    order = rank if rank is not None else range(len(crystals))
    return group_composition(result.crystals, result.crystal_key, ids, list(order), tolerances, options)


def together(crystals, grade="near", options=None) -> bool:
    return len(set(group(crystals, options=options).members[grade].group_id.tolist())) == 1


def written(crystal: draw.Crystal) -> draw.Crystal:
    """As a file with six digits has it."""
    return np.round(crystal[0], 6), np.round(crystal[1], 6), crystal[2]


# Recognition ---------------------------------------------------------------------------------------------------------


def base_crystals(count: int, seed: int) -> list[draw.Crystal]:
    """Random crystals of all lattice types, the structure types of the package, ase's element crystals."""
    from ase.build import bulk
    from ase.data import chemical_symbols, reference_states

    rng = np.random.default_rng(seed)
    out = list(draw.type_crystals())
    for number, state in enumerate(reference_states):
        if state is not None and state["symmetry"] in ("fcc", "bcc", "hcp", "diamond") and number < 90:
            try:
                atoms = bulk(chemical_symbols[number])
            except ValueError:  # no basis in the tables
                continue
            out.append((np.array(atoms.cell), atoms.get_scaled_positions(), atoms.get_chemical_symbols()))
    while len(out) < 300:
        kind = draw.LATTICE_TYPES[len(out) % 14]
        sites = int(rng.integers(1, 9))
        out.append(draw.random_crystal(rng, kind, sites, ("Si", "O", "C")[: int(rng.integers(1, 4))]))
    return [out[i] for i in rng.permutation(len(out))[:count]]


def check_recognition(count: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    missed = 0
    bases = base_crystals(count, seed)
    for base in bases:
        exact = [written(draw.disguise(rng, base)) for _ in range(2)]
        mirrored = written(draw.disguise(rng, draw.mirror(base)))
        # a noisy cell is its own primitive cell: it must hold at most 8 cells of the plain crystal to match it at all
        noisy = written(draw.disguise(rng, canonical([base])[0], noise=0.02, strain=0.002))
        found = group([*exact, mirrored, noisy]).members["near"]
        assert len(set(found.group_id[:3].tolist())) == 1
        missed += found.family_id[3] != found.family_id[0]
    assert missed <= count // 1000


def test_disguised_copies_are_found():
    check_recognition(40, 1)


@pytest.mark.slow
def test_disguised_copies_are_found_for_all_300():
    check_recognition(300, 2)


def near_misses(rng: np.random.Generator, crystal: draw.Crystal) -> list[draw.Crystal]:
    """Crystals a little too far away: a site moved, unlike species swapped, edges longer, sheared."""
    cell, positions, tokens = crystal
    out = []
    if len(tokens) > 1:
        v = rng.normal(size=3)
        moved = positions.copy()
        moved[rng.integers(len(tokens))] += 0.6 * v / np.linalg.norm(v) @ np.linalg.inv(cell)
        out.append((cell, moved, tokens))
    unlike = [(i, j) for i, j in itertools.combinations(range(len(tokens)), 2) if tokens[i] != tokens[j]]
    if unlike:
        i, j = unlike[rng.integers(len(unlike))]
        swapped = list(tokens)
        swapped[i], swapped[j] = tokens[j], tokens[i]
        out.append((cell, positions, swapped))
    out.append((cell * 1.02, positions, tokens))
    shear = np.eye(3)
    shear[0, 1] = 0.05
    out.append((cell @ shear, positions, tokens))
    return out


def check_near_misses(count: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    window = near_window(T)
    tried = 0
    for n in range(count):
        kind = draw.LATTICE_TYPES[n % 14]
        base = draw.random_crystal(rng, kind, int(rng.integers(1, 6)), ("Si", "O")[: int(rng.integers(1, 3))])
        for other in near_misses(rng, base):
            if draw.least_distance(other[0], other[1]) < 0.5:
                continue
            first, second = canonical([base, other])
            truth = slow_match(first, second, window.shifts, window.strains, 1)
            if truth is None or truth.grade > 1:  # the slow twin says that it is a miss
                tried += 1
                assert not together([base, draw.disguise(rng, other, 4)])
    assert tried > 2 * count


def test_near_misses_stay_apart():
    check_near_misses(14, 3)


@pytest.mark.slow
def test_near_misses_stay_apart_on_many():
    check_near_misses(150, 4)


# Crystals that stay apart, and crystals that meet ---------------------------------------------------------------------


def test_polytypes_stay_apart():
    """SiC 2H, 3C, 4H, 6H, 9R: stackings AB, ABC, ABCB, ABCACB, ABABCBCAC (Ramsdell 1947)."""
    found = group([stacked(s) for s in ("AB", "ABC", "ABCB", "ABCACB", "ABABCBCAC")])
    assert len(set(found.members["near"].family_id.tolist())) == 5


def sites_24d(u: float) -> draw.Crystal:
    """Wyckoff position 24d of Ia-3 (International Tables A, no. 206): x 0 1/4 and its images."""
    base = [(u, 0, 0.25), (-u + 0.5, 0, 0.75), (0.25, u, 0), (0.75, -u + 0.5, 0), (0, 0.25, u), (0, 0.75, -u + 0.5)]
    base += [tuple(-x for x in p) for p in base]
    positions = np.array(base + [tuple(x + 0.5 for x in p) for p in base])
    return np.eye(3) * 9.4, positions - np.floor(positions), ["Mn"] * 24


def test_homometric_sets_stay_apart():
    """+u and -u: equal distances, not congruent (Patterson, Nature 143, 939, 1939)."""
    from lattice_census.fingerprint.distributions import fingerprint

    pair = [sites_24d(0.03), sites_24d(-0.03)]
    means = fingerprint(draw.batch(pair)).means
    assert np.abs(means[0] - means[1]).max() < 1e-5
    assert not together(pair)


def test_types_of_one_composition_stay_apart():
    """CaC2 and MoSi2 types: I4/mmm, 2a and 4e with z = 0.406 and 0.333 (values from memory)."""
    out = []
    for z, c_over_a in ((0.406, 1.64), (0.333, 2.45)):
        a = (90 / c_over_a) ** (1 / 3)
        positions = np.array(
            [[0, 0, 0], [0.5, 0.5, 0.5], [0, 0, z], [0, 0, -z], [0.5, 0.5, 0.5 + z], [0.5, 0.5, 0.5 - z]]
        )
        out.append((np.diag([a, a, c_over_a * a]), positions, ["Ca"] * 2 + ["C"] * 4))
    assert not together(out)


def test_half_heusler_with_two_sites_swapped_stays_apart():
    """MgAgAs type: 0, 1/4, 1/2 of the cube diagonal; which species stands at 1/4 matters."""
    cell = draw.PRIMITIVE["F"] * 6.2
    positions = np.array([[0.0] * 3, [0.25] * 3, [0.5] * 3])
    assert not together([(cell, positions, ["Mg", "Ag", "As"]), (cell, positions, ["Ag", "Mg", "As"])])
    assert together([(cell, positions, ["Mg", "Ag", "As"]), (cell, positions, ["As", "Ag", "Mg"])])


def test_ferroelectric_distortion_stays_apart():
    a = 4.0
    positions = np.array([[0, 0, 0], [0.5, 0.5, 0.5], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5]])
    tokens = ["Ba", "Ti", "O", "O", "O"]
    polar = np.diag([a, a, a * 1.01]) * 1.01 ** (-1 / 3)
    moved = positions.copy()
    moved[1, 2] += 0.1 / polar[2, 2]
    moved[2:, 2] -= 0.1 / polar[2, 2]
    assert not together([(np.eye(3) * a, positions, tokens), (polar, moved, tokens)])


def quartz(x: float, y: float, z: float, u: float) -> draw.Crystal:
    """Quartz, P3_2 21 in the axes of 3a (u 0 2/3), 6c (x y z); a = 4.913, c = 5.405 (Le Page & Donnay 1976)."""
    cell = draw.cell_from_parameters(4.913, 4.913, 5.405, 90, 90, 120)
    si = [(u, 0, 2 / 3), (0, u, 1 / 3), (-u, -u, 0)]
    o = [(x, y, z), (-y, x - y, z + 2 / 3), (y - x, -x, z + 1 / 3)]
    o += [(y, x, -z), (x - y, -y, 1 / 3 - z), (-x, y - x, 2 / 3 - z)]
    return cell, np.array(si + o), ["Si"] * 3 + ["O"] * 6


ALPHA_QUARTZ = quartz(0.4135, 0.2669, 0.7858, 0.4697)
BETA_QUARTZ = quartz(0.4142, 0.2071, 0.8333, 0.5)


def test_quartz():
    """Alpha and beta apart (values from memory); either hand meets when mirror images merge, and not when separate."""
    assert not together([ALPHA_QUARTZ, BETA_QUARTZ])
    hands = [ALPHA_QUARTZ, draw.mirror(ALPHA_QUARTZ)]
    assert together(hands)
    assert not together(hands, options=Options(mirror_images="separate"))
    found = group(hands)
    assert found.matches.mirrored.tolist() == [True]


def test_chiral_crystal_in_p212121():
    """A general position of P2_1 2_1 2_1 (International Tables A, no. 19)."""
    cell = np.diag([5.0, 6.3, 8.1])
    positions, tokens = [], []
    for x, y, z, kind in ((0.1, 0.2, 0.33, "Si"), (0.37, 0.06, 0.15, "O")):
        positions += [(x, y, z), (0.5 - x, -y, 0.5 + z), (-x, 0.5 + y, 0.5 - z), (0.5 + x, 0.5 - y, -z)]
        tokens += [kind] * 4
    crystal = (cell, np.array(positions), tokens)
    hands = [crystal, draw.mirror(crystal)]
    assert together(hands)
    assert not together(hands, options=Options(mirror_images="separate"))
    assert together(
        [crystal, draw.disguise(np.random.default_rng(5), crystal)], options=Options(mirror_images="separate")
    )


def test_ordered_alloys_stay_apart():
    """CuAu in L1_0 (layers along 001) and L1_1 (along 111) on one cubic lattice, a = 3.9."""
    a = 3.9
    l10 = (np.array([[a / 2, a / 2, 0], [-a / 2, a / 2, 0], [0, 0, a]]), np.array([[0.0] * 3, [0.5] * 3]), ["Cu", "Au"])
    f = draw.PRIMITIVE["F"] * a
    doubled = np.array([[1, -1, 0], [0, 1, -1], [1, 1, 0]]) @ f
    l11 = (doubled, np.array([f[0] @ np.linalg.inv(doubled), [0.0] * 3]), ["Cu", "Au"])
    assert abs(abs(np.linalg.det(doubled)) - a**3 / 2) < 1e-9
    assert not together([l10, l11])


def test_rock_salt_with_its_species_exchanged():
    cell = draw.PRIMITIVE["F"] * 5.64
    positions = np.array([[0.0] * 3, [0.5] * 3])
    assert together([(cell, positions, ["Na", "Cl"]), (cell, positions, ["Cl", "Na"])], grade="same")


def test_nearly_symmetric_lattices_under_tiny_noise():
    check_tiny_noise(40)


@pytest.mark.slow
def test_a_thousand_draws_of_nearly_symmetric_lattices_under_tiny_noise():
    check_tiny_noise(1000)


def check_tiny_noise(draws: int) -> None:
    rng = np.random.default_rng(6)
    fcc = (draw.PRIMITIVE["F"] * 3.6, np.zeros((1, 3)), ["Cu"])
    hexagonal = draw.cell_from_parameters(2.5, 2.5, 2.5 * np.sqrt(8 / 3), 90, 90, 120)
    hcp = (hexagonal, np.array([[1 / 3, 2 / 3, 0.25], [2 / 3, 1 / 3, 0.75]]), ["Cu", "Cu"])
    cubic = (np.diag([4.0, 4.0001, 4.0002]), np.array([[0.0] * 3, [0.5, 0.5, 0.52]]), ["Cu", "Cu"])
    for base in (fcc, hcp, cubic):
        crystals = [base]
        for _ in range(draws):
            noisy = (base[0] * (1 + rng.uniform(-1e-6, 1e-6, (3, 3))), base[1], base[2])
            crystals.append(draw.disguise(rng, noisy, 2, noise=1e-6))
        assert together(crystals, grade="same")


# The graph -----------------------------------------------------------------------------------------------------------


def test_a_chain_is_one_family_of_several_groups():
    """One atom of 16 moved 0.08 further each time: with the mean removed, 0.08 (1 - 1/16) = 0.075 a step; in steps of
    half of that neighbours match within 0.05."""
    cell, positions, tokens = draw.random_crystal(np.random.default_rng(8), "aP", 2, ("Si",), 2.0)
    crystals = []
    for i in range(10):
        moved = positions.copy()
        moved[0] += np.array([0.08 * i, 0, 0]) @ np.linalg.inv(cell)
        crystals.append((cell, moved, tokens))
    found = group(crystals)
    near = found.members["near"]
    assert len(set(near.family_id.tolist())) == 1
    assert 3 <= len(set(near.group_id.tolist())) <= 5
    assert near.witness_shift.max() <= 0.05
    graph = similarity_graph(
        np.arange(10),
        found.matches.pairs,
        found.matches.largest_shift,
        found.matches.strain,
        found.matches.largest_shift,
    )
    assert graph.number_of_nodes() == 10


def true_pairs(crystals, tolerances):
    """By grade (same, near): whether two ids match, in both orders, from the slow twin."""
    window = near_window(tolerances)
    out: tuple[dict, dict] = ({}, {})
    for a, b in itertools.combinations(range(len(crystals)), 2):
        found = slow_match(crystals[a], crystals[b], window.shifts, window.strains, 2)
        for grade in (0, 1):
            near = found is not None and found.grade <= grade
            out[grade][(f"r{a:04d}", f"r{b:04d}")] = out[grade][(f"r{b:04d}", f"r{a:04d}")] = near
    return out


def collection(seed: int, size: int) -> list[draw.Crystal]:
    """Two crystals of one composition with many copies at distances around the limits."""
    rng = np.random.default_rng(seed)
    bases = [draw.random_crystal(rng, draw.LATTICE_TYPES[seed % 14], 4) for _ in range(2)]
    out = [draw.disguise(rng, bases[i % 2], 1, noise=0.045, strain=0.004) for i in range(size - 2)]
    out.append(out[0])
    out.append(draw.disguise(rng, draw.supercell(bases[0], np.diag([1, 2, 1])), 1, noise=0.02))
    return canonical(out)


def test_families_and_groups_equal_brute_force():
    check_against_brute_force(range(900, 902), 7, (1.0,))


@pytest.mark.slow
def test_families_and_groups_equal_brute_force_on_many():
    check_against_brute_force(range(903, 907), 10)


def check_against_brute_force(seeds, size, factors=(0.6, 1.0, 1.5)):
    """Without crowds and with."""
    several = 0
    for seed in seeds:
        crystals = collection(seed, size)
        rank = np.random.default_rng(seed).permutation(len(crystals))
        for factor in factors:
            t = replace(T, near_shift=0.05 * factor, near_strain=0.01 * factor)
            truth = true_pairs(crystals, t)
            for crowded in (200, 2):
                found = group(crystals, t, Options(crowded=crowded), rank)
                ranks = {name: int(r) for name, r in zip(found.ids.tolist(), rank.tolist(), strict=True)}
                for grade, name in enumerate(("same", "near")):
                    check_grouping(found, ranks, truth[grade], name)
                check_matches(found)
            several += len(set(found.members["near"].group_id)) > len(set(found.members["near"].family_id))
    assert several


def test_result_does_not_depend_on_the_order_of_records():
    crystals = collection(930, 10)
    result = canonicalise(draw.batch(crystals), T)
    ids = np.array([f"x{i}" for i in range(10)])
    rank = np.arange(10)
    first = group_composition(result.crystals, result.crystal_key, ids.tolist(), rank, T)
    order = np.random.default_rng(9).permutation(10)
    turned = canonicalise(draw.batch([crystals[i] for i in order]), T)
    second = group_composition(turned.crystals, turned.crystal_key, ids[order].tolist(), rank[order], T)
    assert (first.ids == second.ids).all()
    for grade in ("same", "near"):
        assert (first.members[grade].family_id == second.members[grade].family_id).all()
        assert (first.members[grade].group_id == second.members[grade].group_id).all()
    assert (first.matches.pairs == second.matches.pairs).all()
    assert (first.matches.largest_shift == second.matches.largest_shift).all()
    assert (first.witnesses.pairing == second.witnesses.pairing).all()


def test_tighter_tolerances_refine_the_families():
    for seed in range(940, 944):
        crystals = collection(seed, 12)
        wide = group(crystals).members["near"].family_id.tolist()
        half = replace(T, near_shift=0.025, near_strain=0.005, same_shift=0.005, same_strain=0.0005)
        tight = group(crystals, half).members["near"].family_id.tolist()
        assert len(set(zip(tight, wide, strict=True))) == len(set(tight))


def test_pins():
    crystals = collection(950, 6)[:4]
    far = draw.random_crystal(np.random.default_rng(10), "aP", 4)
    copies = [crystals[0], crystals[0], far]
    ids = ["r0000", "r0001", "r0002"]
    assert group(copies).members["near"].group_id.tolist() == ["r0000", "r0000", "r0002"]
    apart = group(copies, options=Options(apart=((ids[0], ids[1]),))).members["near"]
    assert apart.group_id.tolist() == ids
    joined = group(copies, options=Options(together=((ids[1], ids[2]),))).members["near"]
    assert len(set(joined.family_id.tolist())) == 1
    with pytest.raises(UsageError, match="not in this composition"):
        group(copies, options=Options(apart=(("r0000", "elsewhere"),)))


def test_rescaled_and_isotypic():
    rng = np.random.default_rng(12)
    base = draw.random_crystal(rng, "mP", 4)
    blown = draw.disguise(rng, (base[0] * 1.05, base[1], base[2]), 1)
    assert not together([base, blown])
    assert together([base, blown], grade="rescaled", options=Options(search="rescaled"))
    far = draw.disguise(rng, (base[0] * 1.4, base[1], base[2]), 1)
    assert not together([base, far], grade="rescaled", options=Options(search="rescaled"))
    assert together([base, far], grade="isotypic", options=Options(search="isotypic"))
    other = (far[0], far[1], [{"Si": "O", "O": "Si"}[t] for t in far[2]])
    found = group([base, other], options=Options(search="isotypic"))
    assert len(set(found.members["isotypic"].family_id.tolist())) == 1
    assert sorted(found.witnesses.pairing.tolist()) == [0, 1, 2, 3]
    near = draw.disguise(rng, base, 1, noise=0.02, strain=0.009)
    assert together([base, near], grade="rescaled", options=Options(search="rescaled"))


def test_components_forest_and_weak_links():
    edges = np.array([[0, 1], [1, 2], [0, 2], [2, 3], [5, 6]])
    assert components(7, edges).tolist() == [0, 0, 0, 0, 4, 5, 5]
    kept = spanning_forest(7, edges, np.array([0.3, 0.2, 0.1, 0.9, 0.5]))
    assert edges[kept].tolist() == [[1, 2], [0, 2], [2, 3], [5, 6]]
    graph = similarity_graph(np.arange(4), edges, *[np.ones(5)] * 3)
    assert weak_links(graph) == ([(2, 3)], [2])
    assert stars(4, np.array([3, 0, 1, 2]), np.array([[0, 1], [2, 3]])).tolist() == [1, 1, 2, 2]


def test_reasons():
    cell = np.diag([3.0, 4.0, 5.0])
    one, double = np.eye(3, dtype=np.int64), np.diag([2, 1, 1])
    turned = np.array([[1, 1, 0], [0, 1, 0], [0, 0, 1]])
    n = 6
    found = reasons(
        np.array([cell] * n), np.array([cell * 1.001] * n),
        np.array([one] * n), np.array([one, one, turned, double, one, one]),
        np.array([one, one, one, one, one, double]), np.array([one, one, one, one, one, double]),
        np.array([False, False, False, False, True, False]), np.array([True, *[False] * (n - 1)]), 0.015,
    )  # fmt: skip
    assert found.tolist() == ["copy", "rerun", "other_cell", "supercell", "mirror", "rerun"]


def test_match_takes_two_crystals():
    crystal = canonical([draw.random_crystal(np.random.default_rng(14), "oF", 3)])[0]
    got = match(draw.batch([crystal, crystal]), T)
    assert got.grade[0] == 0 and got.largest_shift[0] < 1e-12 and got.p_matrix[0].tolist() == np.eye(3).tolist()
