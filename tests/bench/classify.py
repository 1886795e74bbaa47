"""Reduce, lattice type, crystal type once a distinct key, and fingerprint, one core: the figure of the whole."""

from __future__ import annotations

import numpy as np

from lattice_census.cell.crystal_type import classify_crystals
from lattice_census.cell.lattice_type import classify_lattices
from lattice_census.fingerprint.distributions import column_means, distributions
from lattice_census.kernels import warm_up
from lattice_census.model.batch import select
from lattice_census.tolerances import Tolerances

from .figures import Figure, Options, Report
from .structures import canonical_of, mixed
from .timing import each, ratio, reference, sure_numbers, timed

AGREEMENT = 0.98
"""Least share of space groups that are the reference's, where the tolerance does not matter to it."""


def run(options: Options) -> Report:
    """Time each part; the space groups are compared with the reference's."""
    warm_up()
    batch, tolerances, repeat = mixed(options, 2000), Tolerances(), options.times(3)
    canonical, reduced = timed(lambda: canonical_of(batch), repeat)
    _, first = np.unique(np.array(canonical.crystal_key), return_index=True)
    distinct = select(canonical.crystals, np.sort(first))
    lattices, lattice_time = timed(lambda: classify_lattices(distinct.cells, tolerances), repeat)
    crystals, crystal_time = timed(lambda: classify_crystals(distinct, lattices, tolerances), repeat)
    _, print_time = timed(lambda: column_means(distinct, distributions(distinct, 64)), repeat)
    ours = dict(zip(crystals.rows.tolist(), crystals.numbers.tolist(), strict=True))
    sure = {i: n for i, n in enumerate(sure_numbers(distinct)) if n is not None}
    agree = float(np.mean([ours.get(i) == n for i, n in sure.items()]))
    assert agree >= AGREEMENT, f"only {agree:.3f} of the space groups are those of the reference"
    theirs, count = reference(batch, repeat), len(batch)
    whole = reduced + lattice_time + crystal_time + print_time
    return Report(
        "classify",
        {"structures": count, "distinct_keys": len(distinct), "space groups compared": len(sure)},
        (
            each("reduce", reduced, count),
            each("lattice type", lattice_time, count),
            each("space group", crystal_time, count),
            each("fingerprint", print_time, count),
            each("reference", theirs, 1),
            ratio("reduce + classify + fingerprint", whole, count, theirs, 0.4),
            Figure(
                "space groups as the reference's, where that is sure",
                100 * agree,
                "%",
                reach=100 * AGREEMENT,
                at_least=True,
            ),
        ),
    )
