"""The Bravais type of lattices by their metric alone, with the ladder to the higher types.

The label of a lattice is the type of the largest holohedry to which a lattice lies within `lattice_strain_tolerance`;
of several equally large, the nearest. How near: the largest |ln| of the three principal stretches to the nearest
lattice with that holohedry, nearest in the sum of the squares of the three (kernels/lattice_strain.py), so that a
cell 4, 4, 4.04 is 0.66 % from cubic. The search is complete (kernels/automorphisms.py), so that the answer follows
the lattice and not the basis that came in, however many reduced bases the lattice nearly has.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import polars as pl
from numpy.typing import NDArray

from ..errors import NumericsError
from ..kernels.lattice_type import classify
from ..lattice.bravais import ALL_TYPES, HOLOHEDRY_ORDER, LADDER_TYPES, LATTICE_TYPES
from ..lattice.conventional import is_conventional
from ..model.batch import Floats, Ints
from ..tolerances import Tolerances

LADDER_REACH = 0.1
"""Largest strain up to which the ladder looks for higher types."""

_ORDERS = np.array([HOLOHEDRY_ORDER[t] for t in ALL_TYPES], np.int64)
_LAYER_CODE = {0: "mp", LATTICE_TYPES.index("oP"): "op", LATTICE_TYPES.index("oS"): "oc",
               LATTICE_TYPES.index("tP"): "tp", LATTICE_TYPES.index("hP"): "hp"}  # fmt: skip
"""A layer's code by that of the prism on its plane lattice."""


@dataclass(frozen=True, slots=True)
class LatticeTypes:
    """Types of n lattices, as read-only columns."""

    codes: Ints
    """(n,) int64: index in lattice.bravais.ALL_TYPES."""

    strain: Floats
    """(n,) float64: logarithmic strain to the nearest lattice that has the type exactly; 0 for aP and mp."""

    ladder: Floats
    """(n, 19) float64: strain to the nearest lattice of each of ALL_TYPES; NaN where the type is not higher than the
    label (its holohedry is not larger), or is beyond `ladder_reach`."""

    ladder_reach: Floats
    """(n,) float64: strain up to which the ladder is complete: LADDER_REACH, halved as often as needed for lattices so
    flat or so long that more two-fold axes lie within it than are kept (kernels/automorphisms.MAX_AXES)."""

    matrices: Ints
    """(n, 3, 3) int64: C, conventional_cell = C @ cell; det C = 1, 2, 3 or 4. Setting: bravais.CONVENTIONAL_SETTING."""

    conventional_cells: Floats
    """(n, 3, 3) float64, angstrom, rows are vectors, in the frame of the given cells; not idealised."""

    def __post_init__(self) -> None:
        for f in fields(self):
            array = np.ascontiguousarray(getattr(self, f.name)).view()
            array.flags.writeable = False
            object.__setattr__(self, f.name, array)

    def __len__(self) -> int:
        return len(self.codes)

    @property
    def symbols(self) -> list[str]:
        """The n symbols."""
        return [ALL_TYPES[c] for c in self.codes]

    @property
    def holohedry_orders(self) -> Ints:
        """(n,) int64: order of the holohedry of each label."""
        return _ORDERS[self.codes]

    def frame(self) -> pl.DataFrame:
        """A frame of n rows: lattice_type, lattice_strain, ladder_reach, and ladder_mP ... ladder_hp with nulls."""
        columns = {
            "lattice_type": pl.Series(self.symbols, dtype=pl.String),
            "lattice_strain": pl.Series(self.strain),
            "ladder_reach": pl.Series(self.ladder_reach),
        }
        for symbol in LADDER_TYPES:
            columns[f"ladder_{symbol}"] = pl.Series(self.ladder[:, ALL_TYPES.index(symbol)]).fill_nan(None)
        return pl.DataFrame(columns)


def classify_lattices(
    cells: Floats, tolerances: Tolerances, periodicity: NDArray[np.uint8] | None = None
) -> LatticeTypes:
    """Lattice types of primitive cells (n, 3, 3), angstrom, rows are vectors, right-handed.

    The cells should be reduced: the types do not depend on it, but the work grows with the length of the basis
    vectors, and aP and mp lattices have the given cell for their conventional one. periodicity: (n,) uint8, 3
    (default), or 2 where only the first two rows are periodic; of those only the plane counts. Raises NumericsError
    where a conventional cell fails its predicate (lattice/conventional.py), and ValueError for a cell without volume
    or left-handed.
    """
    cells = np.ascontiguousarray(cells, dtype=np.float64).reshape(-1, 3, 3)
    n = len(cells)
    if not np.all(np.isfinite(cells)) or not np.all(np.linalg.det(cells) > 0):
        raise ValueError("classify_lattices needs right-handed cells of positive volume")
    layers = np.zeros(n, np.bool_) if periodicity is None else np.asarray(periodicity) == 2
    tolerance = tolerances.lattice_strain_tolerance
    kinds, reaches = np.zeros(n, np.int64), np.zeros(n)
    near = np.zeros((n, len(LATTICE_TYPES)))
    matrices = np.zeros((n, 3, 3), np.int64)
    classify(cells, layers, tolerance, max(LADDER_REACH, tolerance), kinds, near, reaches, matrices)

    strain = near[np.arange(n), kinds]
    codes = kinds.copy()
    ladder = np.full((n, len(ALL_TYPES)), np.nan)
    ladder[:, : len(LATTICE_TYPES)] = np.where(np.isfinite(near) & ~layers[:, None], near, np.nan)
    for code, symbol in _LAYER_CODE.items():
        target = ALL_TYPES.index(symbol)
        codes[layers & (kinds == code)] = target
        ladder[layers, target] = np.where(np.isfinite(near[layers, code]), near[layers, code], np.nan)
    ladder[_ORDERS[None, :] <= _ORDERS[codes][:, None]] = np.nan

    conventional = matrices @ cells
    good = is_conventional(conventional, matrices, codes, tolerance)
    if not good.all():
        row = int(np.flatnonzero(~good)[0])
        raise NumericsError(
            f"the conventional cell of lattice {row} is not one of type {ALL_TYPES[codes[row]]}: "
            f"cell {cells[row].tolist()}, matrix {matrices[row].tolist()}"
        )
    return LatticeTypes(codes, strain, ladder, reaches, matrices, conventional)
