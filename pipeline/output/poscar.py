"""A crystal as POSCAR-style text."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import groupby

import numpy as np
from numpy.typing import NDArray

from ..model.species import is_full
from .cif import number


def poscar_text(
    cell: NDArray[np.float64],
    positions: NDArray[np.float64],
    tokens: Sequence[str],
    name: str = "",
    extra: Mapping[str, object] | None = None,
) -> str:
    """The text, in double precision; sites keep their order, so that a species may be listed more than once.

    cell: (3, 3), angstrom, rows a, b, c. positions: (n, 3), fractional. name and extra (key=value) make the first line.
    Raises ValueError for a mixed or partly filled site: the format has no way to say it.
    """
    unwritable = sorted({t for t in tokens if not is_full(t)})
    if unwritable:
        raise ValueError(f"POSCAR-style text cannot hold the mixed or partly filled site {unwritable[0]}; write a CIF")
    runs = [(symbol, len(list(group))) for symbol, group in groupby(tokens)]
    words = [name, *(f"{k}={v}" for k, v in (extra or {}).items())]
    lines = [" ".join(" ".join(words).split()) or "crystal", "1.0"]
    lines += [" ".join(number(x) for x in row) for row in np.asarray(cell, np.float64).reshape(3, 3).tolist()]
    lines += [" ".join(s for s, _ in runs), " ".join(str(n) for _, n in runs), "Direct"]
    lines += [" ".join(number(x) for x in row) for row in np.asarray(positions, np.float64).reshape(-1, 3).tolist()]
    return "\n".join(lines) + "\n"
