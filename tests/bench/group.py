"""Grouping one composition from its canonical crystals, one core, against the reference for the same records."""

from __future__ import annotations

import time
from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.grouping.composition import group_composition
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances
from tests.invariants import check_matches

from .structures import canonical_of, largest_composition, load
from .timing import reference_seconds, summary


def run(file: Path | None, repeat: int) -> dict[str, Any]:
    """Seconds for the largest composition; the same records in another order must give the same groups."""
    crystals, keys = largest_composition(canonical_of(load(file)))
    count = len(crystals)
    ids = [f"{i:020x}" for i in range(count)]
    group_composition(select(crystals, np.arange(4)), keys[:4], ids[:4], [0, 1, 2, 3], Tolerances())
    seconds, found = [], None
    for _ in range(repeat):
        begun = time.perf_counter()
        found = group_composition(crystals, keys, ids, list(range(count)), Tolerances())
        seconds.append(time.perf_counter() - begun)
    assert found is not None
    check_matches(found)
    order = np.random.default_rng(2).permutation(count)
    other = group_composition(
        select(crystals, order), [keys[i] for i in order], [ids[i] for i in order], order, Tolerances()
    )
    for grade, members in found.members.items():
        assert (members.group_id == other.members[grade].group_id).all()
    reference = reference_seconds(crystals) * count
    taken = summary(seconds)
    return {
        "records": count,
        **found.counts,
        "families": {g: len(set(m.family_id.tolist())) for g, m in found.members.items()},
        "groups": {g: len(set(m.group_id.tolist())) for g, m in found.members.items()},
        "reference_s": reference,
        "group": {**taken, "ratio_to_reference": taken["median_s"] / reference},
    }
