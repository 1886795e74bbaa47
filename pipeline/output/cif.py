"""A crystal as the text of a CIF: one data block without symmetry, every site written out."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from ..model.species import formula_of, parse_token


def cif_text(
    cell: NDArray[np.float64],
    positions: NDArray[np.float64],
    tokens: Sequence[str],
    name: str = "crystal",
    extra: Mapping[str, object] | None = None,
) -> str:
    """The CIF of a crystal, in double precision.

    cell: (3, 3), angstrom, rows a, b, c. positions: (n, 3), fractional. tokens: n species tokens; a mixed site is
    written as one row an element, at one position, with occupancies. name: any text; the block gets a safe form of it.
    extra: further items, tag (with its underscore) to value; None is written as `?`.

    A CIF gives edges and angles alone, which describes a right-handed basis. So a left-handed cell is written as -cell
    with -positions: the same points in space, x @ cell = (-x) @ (-cell). Raises ValueError for a tag that is none.
    """
    cell = np.asarray(cell, np.float64).reshape(3, 3)
    positions = np.asarray(positions, np.float64).reshape(-1, 3)
    if np.linalg.det(cell) < 0:
        cell, positions = -cell, 0.0 - positions
    lengths = np.linalg.norm(cell, axis=1)
    angles = [_angle(cell[i], cell[j]) for i, j in ((1, 2), (0, 2), (0, 1))]
    lines = [f"data_{block_name(name)}"]
    for tag, value in (extra or {}).items():
        if not re.fullmatch(r"_[!-~]+", tag):
            raise ValueError(f"{tag!r} is no CIF tag")
        lines.append(f"{tag} {quoted(value)}")
    lines += [f"_cell_length_{axis} {number(x)}" for axis, x in zip("abc", lengths, strict=True)]
    lines += [f"_cell_angle_{axis} {number(x)}" for axis, x in zip(("alpha", "beta", "gamma"), angles, strict=True)]
    lines += [
        f"_cell_volume {number(abs(np.linalg.det(cell)))}",
        f"_chemical_formula_sum {quoted(_spaced(formula_of(tokens).formula))}",
        "_space_group_name_H-M_alt 'P 1'",
        "_space_group_IT_number 1",
        "loop_",
        "_space_group_symop_operation_xyz",
        "'x, y, z'",
        "loop_",
        "_atom_site_label",
        "_atom_site_type_symbol",
        "_atom_site_fract_x",
        "_atom_site_fract_y",
        "_atom_site_fract_z",
        "_atom_site_occupancy",
    ]
    count: dict[str, int] = {}
    for token, position in zip(tokens, positions.tolist(), strict=True):
        place = " ".join(number(x) for x in position)
        for symbol, occupancy in parse_token(token):
            count[symbol] = count.get(symbol, 0) + 1
            lines.append(f"{symbol}{count[symbol]} {symbol} {place} {occupancy:g}")
    return "\n".join(lines) + "\n"


def number(value: float) -> str:
    """A number in the fewest digits that give back the same double."""
    text = repr(float(value) + 0.0)
    return text.removesuffix(".0") if text.endswith(".0") else text


def block_name(name: str) -> str:
    """A name as a data block may have it: without blanks, ASCII, at most 75 characters (CIF 1.1 syntax)."""
    return re.sub(r"[^A-Za-z0-9_.+\-]+", "_", name)[:70] or "crystal"


def quoted(value: object) -> str:
    """A value so that a CIF parser gives back its text; line breaks become blanks, other control characters `_`."""
    if value is None:
        return "?"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return number(value)
    text = re.sub(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f]", "_", " ".join(str(value).splitlines()))
    plain = re.fullmatch(r"[A-Za-z0-9+\-./()@:|*%&<>=~^{}]+", text) and text not in ("?", ".")
    if plain and not re.match(r"(?:data_|loop_|global_|save_|stop_)", text, re.IGNORECASE):
        return text
    for mark in ("'", '"'):
        # A mark ends a quoted value only where a blank follows it.
        if not re.search(mark + r"(?:\s|$)", text):
            return f"{mark}{text}{mark}"
    return f"\n;{text}\n;"


def _angle(u: NDArray[np.float64], v: NDArray[np.float64]) -> float:
    """Angle in degrees, from the tangent of its half (Kahan): accurate also near 0 and 180, and exact at 90 and 60."""
    u, v = u / np.linalg.norm(u), v / np.linalg.norm(v)
    angle = float(np.degrees(2 * np.arctan2(np.linalg.norm(u - v), np.linalg.norm(u + v))))
    return round(angle) if abs(angle - round(angle)) < 1e-12 else angle


def _spaced(formula: str) -> str:
    return re.sub(r"(?<=.)([A-Z])", r" \1", formula)
