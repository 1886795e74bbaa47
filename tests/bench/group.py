"""Grouping one composition from its canonical crystals, one core, against the reference for the same records."""

from __future__ import annotations

import numpy as np

from lattice_census.grouping.composition import Grouping, group_composition
from lattice_census.kernels import warm_up
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances
from tests.invariants import check_matches

from .figures import Options, Report
from .structures import one_composition
from .timing import ratio, reference, timed


def run(options: Options) -> Report:
    """Seconds for one composition; the same records in another order must give the same groups."""
    warm_up()
    crystals, keys, known = one_composition(options, 2000)
    count = len(crystals)
    ids = [f"{i:020x}" for i in range(count)]
    found, seconds = timed(
        lambda: group_composition(crystals, keys, ids, list(range(count)), Tolerances()), options.times(3)
    )
    check_matches(found)
    order = np.random.default_rng(2).permutation(count)
    other = group_composition(
        select(crystals, order), [keys[i] for i in order], [ids[i] for i in order], order, Tolerances()
    )
    for grade, members in found.members.items():
        assert (members.group_id == other.members[grade].group_id).all(), f"groups at {grade} hang on the order"
    if known is not None:
        check_families(found, known)
    theirs = reference(crystals, options.times(3))
    sizes = {"records": count, **{k: found.counts[k] for k in ("nodes", "candidates", "verified", "crowded")}}
    sizes |= {f"families_{g}": len(set(m.family_id.tolist())) for g, m in found.members.items()}
    return Report(
        "group",
        sizes,
        (seconds.figure("group"), ratio("group", seconds, count, theirs, 1.0)),
    )


def check_families(found: Grouping, known: np.ndarray, share: float = 0.999) -> None:
    """Families at near against the crystal of each record: none holds two, and so much of the copies is found."""
    families = found.members["near"].family_id.tolist()
    pieces = set(zip(families, known.tolist(), strict=True))
    merged = len(pieces) - len(set(families))
    assert merged == 0, f"{merged} families hold different crystals"
    crystals = len(set(known.tolist()))
    assert len(families) - len(pieces) >= share * (len(families) - crystals), (
        f"{crystals} crystals fall into {len(pieces)} families"
    )
