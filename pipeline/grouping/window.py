"""Which pairs are looked for: limits on shift and strain, and the scale the crystals are brought to.

Three searches share the machinery. `near` compares crystals as they are. `rescaled` brings the two of a pair to the
geometric mean of their volumes per site, `isotypic` brings each to one cubic unit a site; after either, the volumes per
site are equal, the three logarithms of the stretches add up to zero, and strain is shape strain.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..kernels.match_columns import Limits
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


def rescaled_window(t: Tolerances, smallest_volume: float) -> Window:
    """Window of the search behind `rescaled`, for crystals brought to one cubic unit a site.

    A pair is compared at the geometric mean of its volumes per site; its limit on the shift, in units of that mean's
    cubic root, is largest for the smallest volume per site of the batch (cubic angstrom), which is taken for all. A
    pair that is `near` as it is has a shape strain of up to 4 s / 3 ((s, -s, -s) less its mean), and its shift, taken
    in a metric of other volume, changes by a factor of up to exp(s / 2). What is found is measured again (scaled.py).
    """
    shift = t.near_shift * math.exp(t.near_strain) / smallest_volume ** (1.0 / 3.0)
    return Window((shift,) * 3, (t.near_strain, t.near_strain, 4.0 / 3.0 * t.near_strain))


def isotypic_window(t: Tolerances) -> Window:
    """Limits of `isotypic`, in units of (V/site)^(1/3)."""
    return Window((t.isotypic_shift,) * 3, (t.isotypic_shape_strain,) * 3)
