"""Several small compositions grouped in one call: the same as each by itself."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest

from lattice_census.cell.canonical import canonicalise
from lattice_census.errors import UsageError
from lattice_census.grouping.composition import CROWDED, Grouping, Options, group_composition
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances

from . import strategies as draw

T = Tolerances()


def noisy(rng: np.random.Generator, crystal: draw.Crystal, size: float) -> draw.Crystal:
    cell, positions, species = crystal
    return cell, positions + rng.uniform(-size, size, positions.shape) @ np.linalg.inv(cell), species


def collection(rng: np.random.Generator) -> tuple[list[draw.Crystal], np.ndarray]:
    """Crystals of two species in five compositions of very different numbers of records, and their compositions."""
    crystals, part = [], []
    for number, (pair, kinds, copies) in enumerate(
        [(("Si", "O"), 6, 4), (("Ti", "O"), 1, 1), (("Ga", "N"), 1, 9), (("Na", "Cl"), 3, 2), (("C", "H"), 2, 5)]
    ):
        for kind in range(kinds):
            base = draw.random_crystal(rng, draw.LATTICE_TYPES[(3 * number + kind) % 14], 3 + kind % 4, pair)
            for copy in range(copies):
                crystals.append(draw.disguise(rng, base, 3, 0.02 * (copy > 0), 0.002 * (copy > 0)))
                part.append(number)
    return crystals, np.array(part)


def rows(found: Grouping, keep: np.ndarray) -> dict[str, object]:
    """What was found of the records `keep` (bool), by record id."""
    ids = set(found.ids[keep].tolist())
    out: dict[str, object] = {"more": dict(zip(found.ids[keep].tolist(), found.more[keep].tolist(), strict=True))}
    for grade, members in found.members.items():
        for field in fields(members):
            out[f"{grade} {field.name}"] = getattr(members, field.name)[keep].tolist()
    match, witness = found.matches, found.witnesses
    for i, (a, b) in enumerate(match.pairs.tolist()):
        if found.ids[a] in ids:
            pairing = witness.pairing[witness.offsets[i] : witness.offsets[i + 1]].tolist()
            values = [getattr(match, f.name)[i].tolist() for f in fields(match) if f.name != "pairs"]
            out[f"{found.ids[a]} {found.ids[b]}"] = repr((values, witness.orthogonal[i].tolist(), pairing))
    return out


def test_parts_of_one_call_are_grouped_as_each_by_itself():
    rng = np.random.default_rng(41)
    crystals, part = collection(rng)
    result = canonicalise(draw.batch(crystals), T)
    assert not result.refusals
    ids = np.array([f"r{i:03d}" for i in rng.permutation(len(crystals))])
    rank = rng.permutation(len(crystals))
    keys = np.array(result.crystal_key)
    whole = group_composition(result.crystals, keys.tolist(), ids.tolist(), rank, T, None, part)
    assert whole.candidates.tolist() == whole.verified.tolist()
    of = dict(zip(ids.tolist(), part.tolist(), strict=True))
    for number in range(5):
        own = np.flatnonzero(part == number)
        alone = group_composition(
            select(result.crystals, own), keys[own].tolist(), ids[own].tolist(), rank[own].tolist(), T
        )
        assert rows(whole, np.array([of[i] == number for i in whole.ids.tolist()])) == rows(
            alone, np.ones(len(own), bool)
        )
        assert whole.candidates[number] == alone.candidates[0]
        assert whole.verified[number] == alone.verified[0]
    assert sum(whole.verified) > 30


def test_records_of_two_parts_are_never_one_group():
    rng = np.random.default_rng(42)
    crystal = draw.random_crystal(rng, "oP", 4, ("Si", "O"))
    result = canonicalise(draw.batch([noisy(rng, crystal, 0.01) for _ in range(4)]), T)
    found = group_composition(
        result.crystals, result.crystal_key, ["a", "b", "c", "d"], [0, 1, 2, 3], T, None, np.array([0, 1, 0, 1])
    )
    assert found.members["near"].group_id.tolist() == ["a", "b", "a", "b"]
    assert found.ids[found.matches.pairs].tolist() == [["a", "c"], ["b", "d"]]


def test_large_parts_and_other_searches_are_refused():
    rng = np.random.default_rng(43)
    result = canonicalise(draw.batch([draw.random_crystal(rng, "aP", 2, ("Si", "O"))] * 3), T)
    ids, rank, part = ["a", "b", "c"], [0, 1, 2], np.array([0, 0, 1])
    for options in (Options(crowded=1), replace(Options(), search="isotypic")):
        with pytest.raises(UsageError, match="small"):
            group_composition(result.crystals, result.crystal_key, ids, rank, T, options, part)
    assert Options().crowded == CROWDED
