"""What two records need outright for a match: one composition, one periodicity, a cell of equal numbers of sites.

Nothing is computed here, and nothing heavy imported.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..tolerances import MAX_SUPERCELL
from .pair_sides import Side

if TYPE_CHECKING:
    from .pair_match import PairMatch


@dataclass(frozen=True, slots=True)
class Apart:
    """Why two records do not match in the store's window."""

    cause: str
    """composition, periodicity, sites, volume, means, columns, rows, lattice, or shift."""

    message: str
    """What was met, for a person, with its numbers."""

    value: float | None
    """The number that rules the match out; None where there is none."""

    limit: float | None
    """What it may be."""

    closest: PairMatch | None
    """The closest match in a wider window, if one was found."""

    searched_shift: float | None
    """Largest shift up to which it was looked for, angstrom; None where it was not."""

    searched_strain: float | None

    def as_json(self) -> dict[str, Any]:
        """Ready for json.dumps."""
        return {
            "cause": self.cause,
            "message": self.message,
            "value": self.value,
            "limit": self.limit,
            "searched_shift_angstrom": self.searched_shift,
            "searched_strain": self.searched_strain,
            "closest": self.closest.as_json() if self.closest is not None else None,
        }


def outright(a: Side, b: Side) -> Apart | None:
    """Why two records cannot match whatever their geometry, or None."""
    cause = _cause(a, b)
    return None if cause is None else Apart(*cause, None, None, None, None, None)


def _cause(a: Side, b: Side) -> tuple[str, str] | None:
    if a.periodicity != b.periodicity:
        return "periodicity", f"A is periodic in {a.periodicity} directions, B in {b.periodicity}"
    if a.composition != b.composition:
        return "composition", f"the compositions differ: A is {a.composition}, B is {b.composition}"
    n, m = len(a.tokens), len(b.tokens)
    both = math.lcm(n, m)
    if max(both // n, both // m) > MAX_SUPERCELL:
        return "sites", (
            f"the primitive cells hold {n} and {m} sites: a cell with equal numbers would be {both // n} and "
            f"{both // m} of them, more than {MAX_SUPERCELL}"
        )
    return None
