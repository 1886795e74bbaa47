"""Reduce, lattice type, crystal type once a distinct key, and fingerprint, one core: the figure of the whole."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.cell.crystal_type import classify_crystals
from lattice_census.cell.lattice_type import classify_lattices
from lattice_census.fingerprint.distributions import column_means, distributions
from lattice_census.kernels import warm_up
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances

from .structures import canonical_of, load
from .timing import against, reference_numbers, reference_seconds, timed


def run(file: Path | None, repeat: int) -> dict[str, Any]:
    """Time each part; the space groups are compared with the reference's."""
    warm_up()
    batch, tolerances = load(file), Tolerances()
    canonical, reduce_time = timed(lambda: canonical_of(batch), repeat)
    _, first = np.unique(np.array(canonical.crystal_key), return_index=True)
    distinct = select(canonical.crystals, np.sort(first))
    distributions(select(distinct, np.arange(1)))
    lattices, lattice_time = timed(lambda: classify_lattices(distinct.cells, tolerances), repeat)
    crystals, crystal_time = timed(lambda: classify_crystals(distinct, lattices, tolerances), repeat)
    _, print_time = timed(lambda: column_means(distinct, distributions(distinct, 64)), repeat)
    reference = reference_seconds(batch)
    count = len(batch)
    whole = {k: reduce_time[k] + lattice_time[k] + crystal_time[k] for k in reduce_time}
    with_print = {k: whole[k] + print_time[k] for k in whole}
    theirs = reference_numbers(distinct)
    agree = [a == b for a, b in zip(crystals.numbers[: len(theirs)].tolist(), theirs, strict=True)]
    return {
        "structures": count,
        "distinct_keys": len(distinct),
        "space_groups_as_reference": float(np.mean(agree)),
        "reference_us_per_structure": reference * 1e6,
        "reduce": against(reference, reduce_time, count),
        "lattice_type": against(reference, lattice_time, count),
        "crystal_type": against(reference, crystal_time, count),
        "fingerprint": against(reference, print_time, count),
        "reduce_and_classify": against(reference, whole, count),
        "reduce_classify_fingerprint": against(reference, with_print, count),
    }
