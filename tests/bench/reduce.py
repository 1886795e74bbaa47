"""Canonical form of given structures, one core."""

from __future__ import annotations

from lattice_census.kernels import warm_up
from lattice_census.model.batch import select
from tests.invariants import check_accounting, check_canonical, check_cell

from .figures import Options, Report
from .structures import canonical_of, mixed
from .timing import each, ratio, reference, timed


def run(options: Options) -> Report:
    """Time the reduction; cells and accounting are checked for all, every promise of the form for 40."""
    warm_up()
    batch = mixed(options, 2000)
    canonical, seconds = timed(lambda: canonical_of(batch), options.times(3))
    check_accounting(batch, canonical)
    check_cell(canonical.crystals)
    some = select(batch, canonical.rows[:: max(1, len(canonical) // 40)])
    check_canonical(some, canonical_of(some))
    theirs = reference(batch, options.times(3))
    return Report(
        "reduce",
        {"structures": len(batch), "distinct_keys": len(set(canonical.crystal_key))},
        (
            each("reduce", seconds, len(batch)),
            each("reference", theirs, 1),
            ratio("reduce", seconds, len(batch), theirs),
        ),
    )
