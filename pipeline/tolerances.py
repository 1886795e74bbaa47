"""All tolerances and thresholds of the product, in one frozen object.

Lengths are in angstrom and are not scaled, unless a field says how. Strains are natural logarithms of stretches.
The values used are stored with each run.
"""

from __future__ import annotations

from dataclasses import dataclass, fields


@dataclass(frozen=True, slots=True)
class Tolerances:
    """Thresholds of one run. Every field is a setting of the same name."""

    exact_tolerance: float = 0.001
    """Largest distance (angstrom) of a site from the mean of its images for an exact translation: feeds the key."""

    primitive_tolerance: float = 0.02
    """The same for an approximate translation: feeds the survey and the search for common lattices, never the key."""

    overlap_distance: float = 0.5
    """Two sites closer than this (angstrom) that are not one mixed site are refused."""

    symmetry_tolerance: float = 0.01
    """Distance (angstrom) handed to the space-group search."""

    lattice_strain_tolerance: float = 0.003
    """Largest logarithmic strain of a lattice to the nearest lattice of a higher type for it to count as that type."""

    same_shift: float = 0.01
    """Grade `same`: largest shift of paired sites (angstrom)."""

    same_strain: float = 0.001
    """Grade `same`: strain."""

    near_shift: float = 0.05
    """Grades `near` and `rescaled`: largest shift of paired sites (angstrom)."""

    near_strain: float = 0.01
    """Grade `near`: strain; grade `rescaled`: shape strain."""

    rescaled_volume_ratio: float = 1.4
    """Grade `rescaled`: volume ratio per site."""

    isotypic_shift: float = 0.02
    """Grade `isotypic`: largest shift in units of (V/site)^(1/3)."""

    isotypic_shape_strain: float = 0.01
    """Grade `isotypic`: shape strain."""

    window_factor: float = 1.5
    """Pairs up to this many times the limits of `near` are verified and kept (the window)."""

    def as_dict(self) -> dict[str, float]:
        """Names and values, for the record of a run."""
        return {f.name: float(getattr(self, f.name)) for f in fields(self)}


GRID = 99991
"""N of the canonical integers n = floor(x N + phi): a prime, so that no common fraction falls on a grid line."""

GRID_OFFSET = 0.31830989
"""phi of the canonical integers: keeps 0 and the fractions of small denominator away from grid lines."""

METRIC_AGREEMENT = 1e-5
"""Bases whose metric, at cell volume 1, agrees with the Niggli metric to this are candidates for the canonical form."""

NIGGLI_EPSILON = 1e-5
"""Comparison tolerance of the Niggli reduction at cell volume 1 (Grosse-Kunstleve, Sauter & Adams 2004)."""

MAX_SUPERCELL = 8
"""Largest determinant of the integer matrices P and Q of a match."""
