"""The sites of a crystal in a larger cell of it, numbered as in grouping/witness.py. NumPy alone, no kernels."""

from __future__ import annotations

import numpy as np

from ..lattice.hermite import hermite_rows
from ..model.batch import Floats, Ints


def common_sites(positions: Floats, matrix: Ints) -> tuple[Floats, Ints]:
    """Sites (n |det|, 3) of a crystal in its cell `matrix` . cell, in fractions of that, and the site (n |det|,) of the
    crystal that each is an image of.

    Site i in coset j has the number i |det| + j and lies at (positions[i] + coset) matrix^-1 (grouping/witness.py, 3).
    """
    a, b, c = np.diag(hermite_rows(matrix)).tolist()
    j = np.arange(a * b * c)
    cosets = np.stack([j // (b * c), j // c % b, j % c], axis=1)
    sites = (positions[:, None, :] + cosets[None]) @ np.linalg.inv(matrix.astype(np.float64))
    return np.asarray(sites.reshape(-1, 3), dtype=np.float64), np.repeat(np.arange(len(positions)), len(j))
