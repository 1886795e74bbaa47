"""The facts of the Bravais types in plain tables: symbols, families, centrings, orders of the holohedries.

Symbols after the IUCr nomenclature report (de Wolff et al., Acta Cryst. A41 (1985) 278): a small letter for the crystal
family, a capital for the centring, S for a centred face of either name. The five lattices of a plane bear two small
letters. Orders and multiplicities are common practice, no source.
"""

from __future__ import annotations

from typing import Final

LATTICE_TYPES: Final = ("aP", "mP", "mS", "oP", "oS", "oI", "oF", "tP", "tI", "hR", "hP", "cP", "cI", "cF")
"""The 14 types in three dimensions; the index is the code that the kernels use."""

LAYER_TYPES: Final = ("mp", "op", "oc", "tp", "hp")
"""The 5 types of a lattice with two periodic directions."""

ALL_TYPES: Final = LATTICE_TYPES + LAYER_TYPES
"""The 19 symbols; the index is the code in every column of codes."""

LADDER_TYPES: Final = tuple(t for t in ALL_TYPES if t not in ("aP", "mp"))
"""The types that can be higher than another: one column of the ladder each."""

HOLOHEDRY_ORDER: Final = {
    "aP": 2, "mP": 4, "mS": 4, "oP": 8, "oS": 8, "oI": 8, "oF": 8, "tP": 16, "tI": 16, "hR": 12, "hP": 24,
    "cP": 48, "cI": 48, "cF": 48, "mp": 2, "op": 4, "oc": 4, "tp": 8, "hp": 12,
}  # fmt: skip
"""Number of operations that map the lattice to itself; for layer types, of the plane lattice in its plane."""

CENTRING_POINTS: Final[dict[str, tuple[tuple[float, float, float], ...]]] = {
    "P": ((0, 0, 0),),
    "S": ((0, 0, 0), (1 / 2, 1 / 2, 0)),
    "I": ((0, 0, 0), (1 / 2, 1 / 2, 1 / 2)),
    "F": ((0, 0, 0), (0, 1 / 2, 1 / 2), (1 / 2, 0, 1 / 2), (1 / 2, 1 / 2, 0)),
    "R": ((0, 0, 0), (2 / 3, 1 / 3, 1 / 3), (1 / 3, 2 / 3, 2 / 3)),
    "p": ((0, 0, 0),),
    "c": ((0, 0, 0), (1 / 2, 1 / 2, 0)),
}
"""Lattice points of the conventional cell (fractional). S: the C face. R: hexagonal axes, obverse setting."""

FAMILY_NAME: Final = {
    "a": "triclinic", "m": "monoclinic", "o": "orthorhombic", "t": "tetragonal", "h": "hexagonal", "c": "cubic",
}  # fmt: skip
"""Crystal families; m in a layer symbol is the oblique plane lattice."""

CONVENTIONAL_SETTING: Final = {
    "aP": "the reduced cell as given",
    "mP": "b unique, a and c the shortest of their plane, a <= c, beta >= 90",
    "mS": "b unique, C face centred, a and c the shortest that this allows, beta >= 90",
    "oP": "a <= b <= c",
    "oS": "C face centred, a <= b",
    "oI": "a <= b <= c",
    "oF": "a <= b <= c",
    "tP": "c unique",
    "tI": "c unique",
    "hR": "hexagonal axes, obverse",
    "hP": "gamma = 120",
    "cP": "",
    "cI": "",
    "cF": "",
    "mp": "the reduced cell as given",
    "op": "a <= b",
    "oc": "the face centred, a <= b",
    "tp": "",
    "hp": "gamma = 120",
}
"""What is fixed in the conventional cell of each type beyond the shape of its family. All are right-handed."""


def multiplicity(symbol: str) -> int:
    """Lattice points of the conventional cell: 1, 2, 3 (hR) or 4 (F)."""
    return len(CENTRING_POINTS[symbol[1]])


def normal_symbol(symbol: str) -> str:
    """The symbol with a centred face of whatever name as S: mA, mC, mI -> mS; oA, oB, oC -> oS. Others unchanged."""
    if symbol[0] == "m" and symbol[1] in "ABCI":
        return "mS" + symbol[2:]
    if symbol[0] == "o" and symbol[1] in "ABC":
        return "oS" + symbol[2:]
    return symbol
