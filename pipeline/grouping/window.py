"""Which pairs are looked for: limits on shift and strain, and the scale the crystals are brought to.

Three searches share the machinery. `near` compares crystals as they are. `rescaled` brings the two of a pair to the
geometric mean of their volumes per site, `isotypic` brings each to one cubic unit a site; after either, the volumes per
site are equal, the three logarithms of the stretches add up to zero, and strain is shape strain.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..kernels.match import Limits
from ..tolerances import Tolerances


@dataclass(frozen=True, slots=True)
class Window:
    """Limits of one search, from the strictest; all of shift and strain ascending."""

    shifts: tuple[float, float, float]
    """Largest shift of `same`, `near`, and the window; angstrom, or units of (V/site)^(1/3) for isotypic."""

    strains: tuple[float, float, float]
    """Strain of the same three."""

    def __post_init__(self) -> None:
        if not (0 < self.shifts[0] <= self.shifts[1] <= self.shifts[2]):
            raise ValueError("the shifts of a window must be positive and ascending")
        if not (0 < self.strains[0] <= self.strains[1] <= self.strains[2]):
            raise ValueError("the strains of a window must be positive and ascending")

    @property
    def shift(self) -> float:
        """The loosest shift looked for."""
        return self.shifts[2]

    @property
    def strain(self) -> float:
        """The loosest strain looked for."""
        return self.strains[2]

    @property
    def translation_tolerance(self) -> float:
        """Tolerance at which every translation that a match could need is approximate (kernels/match.py): a translation
        of the one crystal moves sites of the other by up to 2 D in the mean metric, 2 exp(s/2) D in its own."""
        return 2.0 * math.exp(0.5 * self.strain) * self.shift * (1.0 + 1e-9) + 1e-9

    def limits(self) -> Limits:
        """As the kernel takes them."""
        return Limits(np.array(self.shifts), np.array(self.strains))


def near_window(t: Tolerances) -> Window:
    """`same`, `near`, and the window around `near`."""
    f = t.window_factor
    return Window(
        (min(t.same_shift, t.near_shift), t.near_shift, f * t.near_shift),
        (min(t.same_strain, t.near_strain), t.near_strain, f * t.near_strain),
    )


def rescaled_window(t: Tolerances) -> Window:
    """Limits of `rescaled`: those of `near`, without a margin (a grade of its own, on request)."""
    return Window((t.near_shift,) * 3, (t.near_strain,) * 3)


def isotypic_window(t: Tolerances) -> Window:
    """Limits of `isotypic`, in units of (V/site)^(1/3)."""
    return Window((t.isotypic_shift,) * 3, (t.isotypic_shape_strain,) * 3)
