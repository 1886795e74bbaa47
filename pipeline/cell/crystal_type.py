"""Space group, lattice type, Pearson symbol and standard cell of crystals.

The space group is found by moyopy, one call a distinct crystal at `symmetry_tolerance`. Two things are done without it,
from the number of operations whose residual stays within half, once and twice the tolerance (kernels/operations.py):

- `symmetry_unsure`: the numbers at half and at twice the tolerance differ. Every operation that the group gains or
loses
  between the two has its residual between them, so that this asks for a change of the group itself; three searches at
  three tolerances would ask the same at twice the cost.
- A crystal for which no operation but the identity can bring every site within the tolerance of its partner has space
  group P1, and no search is made: a search at the tolerance accepts no other operations. Whether one can is decided
  from what the mean shift leaves: at most twice the tolerance, because taking it out can add no more than itself, and
  in the root mean square at most the tolerance, because no other shift leaves less.
"""

from __future__ import annotations

import logging
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache
from typing import NamedTuple

import moyopy
import numpy as np
import polars as pl
from numpy.typing import NDArray

from ..errors import UsageError
from ..kernels.operations import count_operations
from ..lattice.bravais import ALL_TYPES, HOLOHEDRY_ORDER, normal_symbol
from ..lattice.metric import lower_triangular
from ..model.batch import CrystalBatch, Floats, Ints, select
from ..tolerances import Tolerances
from .lattice_type import LatticeTypes

SYMMETRY_FAILED = "symmetry_failed"
"""Finding: the search for the space group of a crystal failed; its columns are null and the record stays."""

VACUUM = 10.0
"""angstrom above a layer in its standard cell."""

# Notices about operations of cells that are not primitive; they would go to standard error line by line.
logging.getLogger("moyo").setLevel(logging.ERROR)


@dataclass(frozen=True, slots=True)
class CrystalTypes:
    """Symmetry of the crystals of a batch of n. k of them were classified; arrays are read-only columns of k rows."""

    rows: Ints
    """(k,) int64: row of the batch of each classified crystal, ascending."""

    failures: tuple[tuple[int, str, str], ...]
    """(row of the batch, finding code, message), ascending by row; every row is either here or in `rows`."""

    numbers: Ints
    """(k,) int64: number of the space group (1 to 230), or of the layer group (1 to 80) of a layer."""

    hall_numbers: Ints
    """(k,) int64: setting of the standard cell, as the sequential number of its Hall symbol (1 to 530; layers 1 to
    116)."""

    group_symbols: tuple[str, ...]
    """k short Hermann-Mauguin symbols without spaces, of the standard type and not of a particular setting."""

    codes: Ints
    """(k,) int64: lattice type of the crystal (crystal family and centring of its group), index in
    bravais.ALL_TYPES."""

    pearson: tuple[str | None, ...]
    """k Pearson symbols. For hR the sites of the primitive (rhombohedral) cell are counted: As is hR2. None: a
    layer."""

    pearson_hexagonal: tuple[str | None, ...]
    """k Pearson symbols of hR crystals counted in the hexagonal cell: As is hR6. None for every other type."""

    wyckoff: tuple[str, ...]
    """k Wyckoff sequences: the letters of the orbits, last letter first, with the number of orbits where there are
    several: `e2ca`."""

    standard: CrystalBatch
    """The k standard conventional cells, with the lattice and the positions made exactly symmetric; of a layer with a
    third row along the normal, VACUUM longer than it is thick."""

    standard_matrices: Floats
    """(k, 3, 3) float64: S, rows; standard_cell = (S @ cell) R, up to the strain that makes it exact, R a rotation.
    Integer for primitive cells, up to rounding, but for the last number of a layer's."""

    standard_shifts: Floats
    """(k, 3) float64, fractional: standard_position = (position - shift) S^-1, before it is made exact."""

    pseudo_symmetric: NDArray[np.bool_]
    """(k,): the lattice has more symmetry than the crystal: its holohedry is larger than that of the crystal's type."""

    symmetry_unsure: NDArray[np.bool_]
    """(k,): the group changes between half and twice the symmetry tolerance."""

    def __post_init__(self) -> None:
        names = ("rows", "numbers", "hall_numbers", "codes", "standard_matrices", "standard_shifts")
        for name in (*names, "pseudo_symmetric", "symmetry_unsure"):
            array = np.ascontiguousarray(getattr(self, name)).view()
            array.flags.writeable = False
            object.__setattr__(self, name, array)

    def __len__(self) -> int:
        return len(self.rows)

    @property
    def symbols(self) -> list[str]:
        """The k symbols of the crystals' lattice types."""
        return [ALL_TYPES[c] for c in self.codes]

    def frame(self) -> pl.DataFrame:
        """A frame of k rows: row, crystal_lattice_type, space_group, layer_group (one of the two is null),
        group_symbol, hall_number, pearson, pearson_hexagonal, wyckoff, pseudo_symmetric, symmetry_unsure."""
        layer = self.standard.periodicity == 2
        numbers = [(None, int(n)) if p else (int(n), None) for n, p in zip(self.numbers, layer, strict=True)]
        return pl.DataFrame(
            {
                "row": self.rows,
                "crystal_lattice_type": pl.Series(self.symbols, dtype=pl.String),
                "space_group": pl.Series([bulk for bulk, _ in numbers], dtype=pl.Int64),
                "layer_group": pl.Series([plane for _, plane in numbers], dtype=pl.Int64),
                "group_symbol": pl.Series(self.group_symbols, dtype=pl.String),
                "hall_number": self.hall_numbers,
                "pearson": pl.Series(self.pearson, dtype=pl.String),
                "pearson_hexagonal": pl.Series(self.pearson_hexagonal, dtype=pl.String),
                "wyckoff": pl.Series(self.wyckoff, dtype=pl.String),
                "pseudo_symmetric": self.pseudo_symmetric,
                "symmetry_unsure": self.symmetry_unsure,
            }
        )


class _One(NamedTuple):
    """What is kept of one crystal: arrays and no lists of lists, which Python would look through for rubbish."""

    number: int
    hall_number: int
    wyckoff: str
    cell: Floats
    positions: Floats
    species: list[int]
    matrix: Floats
    shift: Floats


_UNIT, _NO_SHIFT = np.eye(3), np.zeros(3)


@cache
def _space_group(number: int) -> tuple[str, int]:
    """(symbol, code of the lattice type) of a space group."""
    group = moyopy.SpaceGroupType(number)
    return group.hm_short.replace(" ", ""), ALL_TYPES.index(normal_symbol(str(group.bravais_class)))


@cache
def _layer_group(number: int) -> tuple[str, int]:
    """(symbol, code of the lattice type) of a layer group."""
    group = moyopy.LayerGroupType(number)
    return group.hm_short.replace(" ", ""), ALL_TYPES.index(str(group.bravais_class))


def wyckoff_sequence(letters: Sequence[str], orbits: Sequence[int]) -> str:
    """The letters of the orbits, last letter first, each with its number of orbits where that is above 1.

    letters, orbits: for each site its Wyckoff letter and a number common to its orbit. Capital A (after z) is the last.
    """
    return _sequence("".join(sorted(dict(zip(orbits, letters, strict=True)).values())))


@lru_cache(4096)
def _sequence(letters: str) -> str:
    """The sequence from the letter of each orbit, sorted."""
    counts = Counter(letters)
    order = sorted(counts, key=lambda c: (c.isupper(), c), reverse=True)
    return "".join(c + (str(counts[c]) if counts[c] > 1 else "") for c in order)


def _search(cell: Floats, positions: Floats, species: list[int], tolerance: float, layer: bool) -> _One:
    """The symmetry of one crystal. A layer's third vector must be perpendicular to the first two, along z."""
    given = moyopy.Cell(cell.tolist(), positions.tolist(), species)
    found = moyopy.MoyoLayerDataset(given, symprec=tolerance) if layer else moyopy.MoyoDataset(given, symprec=tolerance)
    standard = found.std_cell
    return _One(
        found.number,
        found.hall_number,
        wyckoff_sequence(found.wyckoffs, found.orbits),
        np.array(standard.basis),
        np.array(standard.positions),
        standard.numbers,
        np.array(found.std_linear).T,
        np.array(found.std_origin_shift),
    )


def _without_symmetry(cell: Floats, positions: Floats, species: list[int]) -> _One:
    """P1: the given cell is standard, every site an orbit of its own."""
    n = len(species)
    return _One(1, 1, "a" + (str(n) if n > 1 else ""), cell, positions, species, _UNIT, _NO_SHIFT)


def upright_layer(cell: Floats, positions: Floats) -> tuple[Floats, Floats]:
    """The same layer with its plane in xy and its third vector along z: (cell (3, 3), fractional positions (n, 3)).

    Only the part of the third vector across the plane is kept; sites stay where they are, turned with the plane.
    """
    lower = lower_triangular(cell[None])[0][0]
    upright = lower.copy()
    upright[2, :2] = 0.0
    return upright, positions @ lower @ np.linalg.inv(upright)


def _counts(batch: CrystalBatch, tolerance: float) -> tuple[Ints, Ints]:
    """(n, 2) int64: operations at half and at twice the tolerance, and (n,) int64: operations that a search can accept;
    for layers 0 (found by searching)."""
    counts, possible = np.zeros((len(batch), 2), np.int64), np.zeros(len(batch), np.int64)
    bulk = np.flatnonzero(batch.periodicity == 3)
    chosen = batch if len(bulk) == len(batch) else select(batch, bulk)
    found, able = np.zeros((len(bulk), 2), np.int64), np.zeros(len(bulk), np.int64)
    limits = np.array([0.5 * tolerance, 2.0 * tolerance])
    count_operations(chosen.cells, chosen.offsets, chosen.positions, chosen.species, limits, found, able)
    counts[bulk], possible[bulk] = found, able
    return counts, possible


def _search_layer(cell: Floats, positions: Floats, species: list[int], tolerance: float) -> tuple[_One, bool]:
    """The symmetry of one layer, and whether its group is another at half or at twice the tolerance.

    The search, and so the standard cell, has a third row of the thickness and VACUUM. Its way to the standard cell is
    put in terms of the cell that came: with D = diag(1, 1, third row of the search / that of the cell) and b the bottom
    of the layer, position = search position D + (0, 0, b), so that S becomes S D and the shift s D + (0, 0, b).
    """
    cell, positions = upright_layer(cell, positions)
    third, bottom = float(cell[2, 2]), float(positions[:, 2].min())
    ratio = float(np.ptp(positions[:, 2])) + VACUUM / third
    cell = cell * np.array([1.0, 1.0, ratio])[:, None]
    positions = (positions - [0.0, 0.0, bottom]) / [1.0, 1.0, ratio]
    one = _search(cell, positions, species, tolerance, True)
    others = [_search(cell, positions, species, f * tolerance, True).number for f in (0.5, 2.0)]
    change = np.diag([1.0, 1.0, ratio])
    one = one._replace(matrix=one.matrix @ change, shift=one.shift @ change + [0.0, 0.0, bottom])
    return one, any(number != one.number for number in others)


def classify_crystals(
    batch: CrystalBatch, lattices: LatticeTypes, tolerances: Tolerances, keys: Sequence[str] | None = None
) -> CrystalTypes:
    """The symmetry of each crystal of a batch of canonical crystals (primitive, reduced, right-handed).

    lattices: the lattice types of `batch.cells`, row by row. keys: one a row; rows of one key are searched once and
    share the result. Never raises for a crystal whose search fails: that is a row of `failures`. A crystal whose cell
    is not primitive is counted as what it is, but its `symmetry_unsure` refers to the operations of the given cell.
    """
    n = len(batch)
    if len(lattices) != n or (keys is not None and len(keys) != n):
        raise UsageError(f"{n} crystals, but {len(lattices)} lattice types and {n if keys is None else len(keys)} keys")
    first: dict[object, int] = {}
    source = [first.setdefault(i if keys is None else keys[i], i) for i in range(n)]
    distinct = np.array(list(first.values()), np.int64)
    chosen = select(batch, distinct)
    tolerance = tolerances.symmetry_tolerance
    counts, possible = _counts(chosen, tolerance)
    unsure = (counts[:, 0] != counts[:, 1]).tolist()
    cells, codes = chosen.cells, (chosen.species + 1).tolist()
    starts, planar = chosen.offsets.tolist(), (chosen.periodicity == 2).tolist()
    found: dict[int, tuple[_One, bool]] = {}
    failed: dict[int, str] = {}
    for k, i in enumerate(distinct.tolist()):
        a, b = starts[k], starts[k + 1]
        cell, positions, species = cells[k], chosen.positions[a:b], codes[a:b]
        try:
            if planar[k]:
                found[i] = _search_layer(cell, positions, species, tolerance)
            elif possible[k] == 1:
                found[i] = _without_symmetry(cell, positions, species), unsure[k]
            else:
                found[i] = _search(cell, positions, species, tolerance, False), unsure[k]
        except BaseException as error:
            # A panic of the library is no Exception; a wish to stop is passed on.
            if isinstance(error, KeyboardInterrupt | SystemExit | GeneratorExit):
                raise
            failed[i] = f"no space group was found for {len(species)} sites within {tolerance} angstrom: {error!r}"
    rows = np.array([i for i in range(n) if source[i] in found], np.int64)
    failures = tuple((i, SYMMETRY_FAILED, failed[source[i]]) for i in range(n) if source[i] in failed)
    return _gather(batch, lattices, rows, [found[source[i]] for i in rows.tolist()], failures)


def _gather(
    batch: CrystalBatch,
    lattices: LatticeTypes,
    rows: Ints,
    results: list[tuple[_One, bool]],
    failures: tuple[tuple[int, str, str], ...],
) -> CrystalTypes:
    """Columns from single results, one a row of `rows`."""
    ones = [one for one, _ in results]
    periodicity = batch.periodicity[rows]
    groups = [(_layer_group if p == 2 else _space_group)(one.number) for one, p in zip(ones, periodicity, strict=True)]
    codes = np.array([code for _, code in groups], np.int64)
    symbols = [ALL_TYPES[c] for c in codes]
    sites = [len(one.species) for one in ones]
    counted = [s // 3 if t == "hR" else s for t, s in zip(symbols, sites, strict=True)]
    orders = np.array([HOLOHEDRY_ORDER[t] for t in ALL_TYPES], np.int64)
    standard = CrystalBatch(
        np.array([one.cell for one in ones]).reshape(-1, 3, 3),
        np.concatenate([[0], np.cumsum(sites)]).astype(np.int64),
        np.concatenate([one.positions for one in ones] or [np.zeros((0, 3))]),
        np.array([c for one in ones for c in one.species], np.int32) - 1,
        batch.tokens,
        periodicity,
    )
    return CrystalTypes(
        rows,
        failures,
        np.array([one.number for one in ones], np.int64),
        np.array([one.hall_number for one in ones], np.int64),
        tuple(symbol for symbol, _ in groups),
        codes,
        tuple(t + str(c) if p == 3 else None for t, c, p in zip(symbols, counted, periodicity, strict=True)),
        tuple(t + str(s) if t == "hR" else None for t, s in zip(symbols, sites, strict=True)),
        tuple(one.wyckoff for one in ones),
        standard,
        np.array([one.matrix for one in ones]).reshape(-1, 3, 3),
        np.array([one.shift for one in ones]).reshape(-1, 3),
        lattices.holohedry_orders[rows] > orders[codes],
        np.array([unsure for _, unsure in results], np.bool_),
    )
