"""Canonical form of given structures, one core."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from lattice_census.kernels import warm_up
from tests.invariants import check_accounting, check_cell

from .structures import canonical_of, load
from .timing import against, reference_seconds, timed


def run(file: Path | None, repeat: int) -> dict[str, Any]:
    """Time and check the reduction."""
    warm_up()
    batch = load(file)
    canonical_of(batch)
    canonical, seconds = timed(lambda: canonical_of(batch), repeat)
    check_accounting(batch, canonical)
    check_cell(canonical.crystals)
    reference = reference_seconds(batch)
    return {
        "structures": len(batch),
        "distinct_keys": len(set(canonical.crystal_key)),
        "reference_us_per_structure": reference * 1e6,
        "reduce": against(reference, seconds, len(batch)),
    }
