"""What goes into the matcher and what comes out of it, as columns."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class Crystals(NamedTuple):
    """Crystals ready to be matched; sites sorted by species within each crystal."""

    cells: Floats
    """(n, 3, 3), angstrom, rows."""

    offsets: Ints
    """(n + 1,)"""

    positions: Floats
    """(m, 3), fractional."""

    blocks: Ints
    """(n, kinds + 1): where the sites of each species begin, counted over the batch."""

    rows: NDArray[np.float32]
    """(m, k): ln(d + c / (exp(s) - 1)) of the distances of each site (grouping/candidates.py)."""

    slack: float
    """Two rows of a pair within the window differ by at most this in every column."""

    planar: NDArray[np.bool_]
    """(n,)"""

    clear: Floats
    """(n,): the smaller of the least distance of equal species and the least height of the cell, angstrom."""

    variants: Ints
    """(n + 1,): where the variants of each crystal begin; the first of each is the crystal's own lattice."""

    bases: Floats
    """(v, 3, 3): reduced basis of each variant's lattice, in the frame of `cells`."""

    matrices: Ints
    """(v, 3, 3): cell = matrix @ basis."""

    orders: Ints
    """(v,): |det| of the matrix."""

    moved: Floats
    """(v,): the largest displacement of a site under a translation of the variant, angstrom."""


class Limits(NamedTuple):
    """Limits of a search, from the strictest: `same`, `near`, the window. Shifts in angstrom."""

    shifts: Floats
    """(3,)"""

    strains: Floats
    """(3,)"""


class Matches(NamedTuple):
    """Best proper (column 0) and best improper (column 1) match of each pair, first crystal to second.

    The improper one is given only where it beats the proper one.
    """

    grade: Ints
    """(p, 2): 0 within `same`, 1 within `near`, 2 within the window, 3 none."""

    measures: Floats
    """(p, 2, 2): largest shift, root mean square shift; NaN where there is no match."""

    p: Ints
    """(p, 2, 3, 3): P of the first crystal's cell."""

    q: Ints
    """(p, 2, 3, 3): Q of the second crystal's cell."""

    shift: Floats
    """(p, 2, 3): fractions of the common cell: site of the first + shift = site of the second, up to its own shift."""
