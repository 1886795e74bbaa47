"""A crystal as a frame of extended XYZ."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from ..model.species import is_full, parse_token
from .cif import number


def extxyz_text(
    cell: NDArray[np.float64],
    positions: NDArray[np.float64],
    tokens: Sequence[str],
    name: str = "",
    extra: Mapping[str, object] | None = None,
    periodicity: int = 3,
) -> str:
    """One frame, in double precision.

    cell: (3, 3), angstrom, rows a, b, c. positions: (n, 3), fractional. tokens: n species tokens; where one of them is
    mixed or partly filled, a column `occupancy` is added and a mixed site has one line an element. extra: keys and
    values for the comment line. periodicity: 3, or 2 for a layer whose aperiodic direction is the third row.
    """
    cell = np.asarray(cell, np.float64).reshape(3, 3)
    cartesian = np.asarray(positions, np.float64).reshape(-1, 3) @ cell
    partial = not all(is_full(t) for t in tokens)
    lattice = " ".join(number(x) for x in cell.ravel())
    columns = "species:S:1:pos:R:3" + (":occupancy:R:1" if partial else "")
    pairs = [f'Lattice="{lattice}"', f"Properties={columns}", f'pbc="T T {"T" if periodicity == 3 else "F"}"']
    if name:
        pairs.append(f"label={_value(name)}")
    pairs += [f"{_key(k)}={_value(v)}" for k, v in (extra or {}).items() if v is not None]
    lines = []
    for token, position in zip(tokens, cartesian.tolist(), strict=True):
        place = " ".join(number(x) for x in position)
        for symbol, occupancy in parse_token(token):
            lines.append(f"{symbol} {place} {occupancy:g}" if partial else f"{symbol} {place}")
    return "\n".join([str(len(lines)), " ".join(pairs), *lines]) + "\n"


def _key(key: str) -> str:
    return key if key.isidentifier() else _quoted(key)


def _value(value: object) -> str:
    if isinstance(value, bool):
        return "T" if value else "F"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return number(value)
    return _quoted(value if isinstance(value, str) else json.dumps(value))


def _quoted(text: str) -> str:
    escaped = text.replace("\\", "\\\\").replace('"', '\\"').replace("\r", " ").replace("\n", "\\n")
    return f'"{escaped}"'
