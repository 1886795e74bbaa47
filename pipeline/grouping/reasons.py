"""Why two records match, decided from the witness and from how the two were given."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints

REASONS: dict[str, str] = {
    "copy": "the parsed content is equal",
    "rerun": "given in the same cell, with small differences",
    "other_cell": "given in another cell, origin, order or orientation",
    "supercell": "one of the two is given in, or has by its noise, a larger cell",
    "mirror": "only the mirror image of the one matches the other",
    "rescaled": "matches after both are brought to one volume per site",
    "isotypic": "matches after species are renamed, at any volume",
}


def reasons(
    cells_a: Floats,
    cells_b: Floats,
    given_a: Ints,
    given_b: Ints,
    p_matrix: Ints,
    q_matrix: Ints,
    mirrored: NDArray[np.bool_],
    same_content: NDArray[np.bool_],
    strain_limit: float,
    search: str = "near",
) -> NDArray[np.str_]:
    """The reason (n,) of each of n matches, by the first rule that fits.

    cells_a, cells_b (n, 3, 3): primitive cells; given_a, given_b (n, 3, 3): K, given cell = K @ primitive cell up to a
    rotation; p_matrix, q_matrix (n, 3, 3): of the witness; mirrored, same_content (n,); strain_limit: what two metrics
    of one given cell may differ by; search: `near`, or `rescaled` or `isotypic`, which are their own reason.

    `rerun` asks that the given cells agree, vector by vector, and hold equally many primitive cells: no integer matrix
    has to be guessed for crystals whose lattice maps onto itself in several ways.
    """
    if search in ("rescaled", "isotypic"):
        return np.where(same_content, "copy", search)
    index_a = np.abs(np.rint(np.linalg.det(given_a.astype(np.float64))))
    index_b = np.abs(np.rint(np.linalg.det(given_b.astype(np.float64))))
    common = np.abs(np.rint(np.linalg.det(p_matrix.astype(np.float64))))
    other = np.abs(np.rint(np.linalg.det(q_matrix.astype(np.float64))))
    stretches = np.linalg.svd(np.linalg.solve(given_a @ cells_a, given_b @ cells_b), compute_uv=False)
    same_cell = (np.abs(np.log(stretches)).max(axis=1, initial=0.0) <= strain_limit) & (
        np.sign(np.linalg.det(given_a.astype(np.float64))) == np.sign(np.linalg.det(given_b.astype(np.float64)))
    )
    supercell = (index_a != index_b) | (common != other)
    return np.select(
        [same_content, mirrored, same_cell & ~supercell, supercell | (common > 1)],
        ["copy", "mirror", "rerun", "supercell"],
        "other_cell",
    )
