"""From numbers that a file states to crystals of a batch: the checks that every format shares.

A structure that cannot be meant as it stands raises StructureRefused with a reason of model/refusals.py; the readers
turn that into a row of refusals. Nothing here guesses: a missing or impossible value is refused by name.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from ..model.batch import CrystalBatch
from ..model.raw import Parsed
from ..model.refusals import Refusal
from ..model.species import OCCUPANCY_DECIMALS, OccupancyError, token_of

Floats = NDArray[np.float64]

SHORTEST_EDGE = 0.5
"""angstrom: a shorter cell edge is refused (cell_absurd)."""

LONGEST_EDGE = 10_000.0
"""angstrom: a longer cell edge is refused (cell_absurd)."""

FLATTEST_PARAMETERS = 1e-5
"""V/(abc) below which a cell given by edges and angles is refused: V^2 is then a difference of nearly equal numbers,
and double precision no longer carries it to the strains that are compared."""

FLATTEST_VECTORS = 1e-7
"""V/(abc) below which a cell given by vectors is refused."""

FARTHEST_COORDINATE = 1e4
"""A fractional coordinate beyond this is refused (coordinates_nonfinite)."""

SAME_PLACE = 0.01
"""angstrom: sites this close, at least one of them partly filled, are one mixed site."""

_EXACT_COSINE = {90.0: 0.0, 60.0: 0.5, 120.0: -0.5}


class StructureRefused(Exception):
    """One structure cannot be taken; carries the reason code and the message."""

    def __init__(self, reason: str, message: str) -> None:
        super().__init__(message)
        self.refusal = Refusal(reason, message)


def cell_of_parameters(a: float, b: float, c: float, alpha: float, beta: float, gamma: float) -> list[float]:
    """The nine entries of the cell (rows a, b, c; a along x, b in the xy plane) from edges in angstrom, angles in deg.

    Raises StructureRefused: cell_nonfinite, cell_zero, cell_absurd.
    """

    def refused(reason: str, why: str) -> StructureRefused:
        return StructureRefused(reason, f"cell {a:g} {b:g} {c:g} {alpha:g} {beta:g} {gamma:g}: {why}")

    if not math.isfinite(a + b + c + alpha + beta + gamma):
        raise refused("cell_nonfinite", "not a finite number")
    _check_edges(a, b, c)
    if not (0 < alpha < 180 and 0 < beta < 180 and 0 < gamma < 180):
        raise refused("cell_absurd", "an angle outside 0 to 180 degrees")
    ca, cb, cg = _cosine(alpha), _cosine(beta), _cosine(gamma)
    # V = abc sqrt(1 - ca^2 - cb^2 - cg^2 + 2 ca cb cg): International Tables for Crystallography vol. A, 1.3.2.
    squared = 1 - ca * ca - cb * cb - cg * cg + 2 * ca * cb * cg
    if abs(squared) < 1e-14:
        raise refused("cell_zero", "these angles enclose no volume")
    if squared < 0:
        raise refused("cell_absurd", "no three vectors have these angles")
    flatness = math.sqrt(squared)
    if flatness < FLATTEST_PARAMETERS:
        raise refused("cell_absurd", f"far too flat, V/(abc) = {flatness:.1e}")
    sg = math.sin(math.radians(gamma))
    return [a, 0.0, 0.0, b * cg, b * sg, 0.0, c * cb, c * (ca - cb * cg) / sg, c * flatness / sg]


def _cosine(degrees: float) -> float:
    exact = _EXACT_COSINE.get(degrees)
    return math.cos(math.radians(degrees)) if exact is None else exact


def check_vectors(cell: Sequence[float]) -> None:
    """Refuse a cell given as nine numbers (rows a, b, c, angstrom) that is not finite, empty or absurd."""
    if not math.isfinite(sum(cell)):
        raise StructureRefused("cell_nonfinite", "a component of the cell vectors is not a finite number")
    ax, ay, az, bx, by, bz, cx, cy, cz = cell
    a, b, c = math.hypot(ax, ay, az), math.hypot(bx, by, bz), math.hypot(cx, cy, cz)
    _check_edges(a, b, c)
    volume = abs(ax * (by * cz - bz * cy) - ay * (bx * cz - bz * cx) + az * (bx * cy - by * cx))
    flatness = volume / (a * b * c)
    if flatness < 1e-12:
        raise StructureRefused("cell_zero", f"the cell vectors, of lengths {a:g} {b:g} {c:g}, lie in one plane")
    if flatness < FLATTEST_VECTORS:
        raise StructureRefused("cell_absurd", f"edges {a:g} {b:g} {c:g}: far too flat, V/(abc) = {flatness:.1e}")


def _check_edges(a: float, b: float, c: float) -> None:
    if a == 0 or b == 0 or c == 0:
        raise StructureRefused("cell_zero", f"edges {a:g} {b:g} {c:g}: one has length 0")
    if min(a, b, c) < SHORTEST_EDGE or max(a, b, c) > LONGEST_EDGE:
        limits = f"each must lie between {SHORTEST_EDGE:g} and {LONGEST_EDGE:g} angstrom"
        raise StructureRefused("cell_absurd", f"edges {a:g} {b:g} {c:g}: {limits}")


def check_coordinates(positions: Sequence[float]) -> None:
    """Refuse fractional coordinates (any flat sequence of floats) that are not finite or lie absurdly far outside."""
    if positions and not (
        math.isfinite(sum(positions))
        and max(positions) <= FARTHEST_COORDINATE
        and min(positions) >= -FARTHEST_COORDINATE
    ):
        at = max(range(len(positions)), key=lambda i: abs(positions[i]) if positions[i] == positions[i] else math.inf)
        raise StructureRefused(
            "coordinates_nonfinite", f"site {at // 3 + 1} has the fractional coordinate {positions[at]}"
        )


def check_count(sites: int, max_sites: int) -> None:
    """Refuse more sites than allowed (or none), before anything is allocated for them."""
    if sites > max_sites:
        raise StructureRefused("sites_too_many", f"{sites} sites; the setting max_sites allows {max_sites}")
    if sites <= 0:
        raise StructureRefused("sites_missing", "the structure has no sites")


def fractional(cell: Sequence[float], cartesian: Sequence[float]) -> list[float]:
    """Fractional coordinates of Cartesian ones (flat, angstrom) in a checked cell of nine numbers (rows a, b, c)."""
    if not math.isfinite(sum(cartesian)):
        at = max(range(len(cartesian)), key=lambda i: abs(cartesian[i]) if cartesian[i] == cartesian[i] else math.inf)
        raise StructureRefused("coordinates_nonfinite", f"site {at // 3 + 1} has the coordinate {cartesian[at]}")
    ax, ay, az, bx, by, bz, cx, cy, cz = cell
    # x = r . (b x c)/V and so on: the reciprocal rows. Plain floats, since most structures have few sites.
    ux, uy, uz = by * cz - bz * cy, bz * cx - bx * cz, bx * cy - by * cx
    vx, vy, vz = cy * az - cz * ay, cz * ax - cx * az, cx * ay - cy * ax
    wx, wy, wz = ay * bz - az * by, az * bx - ax * bz, ax * by - ay * bx
    volume = ax * ux + ay * uy + az * uz
    flat = [0.0] * len(cartesian)
    places = list(zip(cartesian[0::3], cartesian[1::3], cartesian[2::3], strict=True))
    flat[0::3] = [(x * ux + y * uy + z * uz) / volume for x, y, z in places]
    flat[1::3] = [(x * vx + y * vy + z * vz) / volume for x, y, z in places]
    flat[2::3] = [(x * wx + y * wy + z * wz) / volume for x, y, z in places]
    return flat


def merge_mixed(
    cell: Sequence[float], positions: Sequence[float], symbols: Sequence[str], occupancies: Sequence[float]
) -> tuple[list[float], list[str]]:
    """Positions (flat, fractional) and tokens of sites, those that share a place drawn together into mixed sites.

    A place is shared within SAME_PLACE, modulo the lattice, where at least one of the sites is partly filled; the first
    of them gives the position. Full sites are left as they are, also on one place: an overlap is for a later check.
    Raises StructureRefused (occupancy_invalid).
    """
    full = 1 - 0.5 * 10.0**-OCCUPANCY_DECIMALS
    matrix = np.array(cell, np.float64).reshape(3, 3)
    rows = np.array(positions, np.float64).reshape(-1, 3)
    taken = np.zeros(len(rows), bool)
    tokens: dict[int, str] = {}
    for i in [k for k, x in enumerate(occupancies) if not x >= full]:
        if taken[i]:
            continue
        d = rows - rows[i]
        d = (d - np.rint(d)) @ matrix
        group: list[int] = np.flatnonzero(((d * d).sum(axis=1) <= SAME_PLACE**2) & ~taken).tolist()
        taken[group] = True
        tokens[group[0]] = _token([(symbols[k], occupancies[k]) for k in group], group[0])
    for i in np.flatnonzero(~taken).tolist():
        tokens[i] = _token([(symbols[i], occupancies[i])], i)
    kept = sorted(tokens)
    flat: list[float] = rows[kept].ravel().tolist()
    return flat, [tokens[i] for i in kept]


def _token(parts: list[tuple[str, float]], site: int) -> str:
    try:
        return token_of(parts)
    except OccupancyError as error:
        raise StructureRefused("occupancy_invalid", f"site {site + 1}: {error}") from None


class _Codes(dict[str, int]):
    """Codes of tokens in order of first appearance."""

    def __missing__(self, token: str) -> int:
        code = self[token] = len(self)
        return code


class BatchBuilder:
    """Gathers the crystals and refusals of a chunk, in any order of rows, and hands them out as Parsed."""

    def __init__(self) -> None:
        self._rows: list[int] = []
        self._cells: list[float] = []
        self._positions: list[float] = []
        self._codes: list[int] = []
        self._counts: list[int] = []
        self._periodicity: list[int] = []
        self._properties: list[dict[str, object]] = []
        self._tokens = _Codes()
        self._refusals: list[tuple[int, Refusal]] = []

    def add(
        self,
        row: int,
        cell: Sequence[float],
        positions: Sequence[float],
        tokens: Sequence[str],
        periodicity: int = 3,
        properties: dict[str, object] | None = None,
    ) -> None:
        """Take a checked crystal: nine numbers of the cell (rows a, b, c, angstrom), flat fractional positions."""
        self._rows.append(row)
        self._cells.extend(cell)
        self._positions.extend(positions)
        self._codes.extend(map(self._tokens.__getitem__, tokens))
        self._counts.append(len(tokens))
        self._periodicity.append(periodicity)
        self._properties.append(properties or {})

    def refuse(self, row: int, refusal: Refusal) -> None:
        """Take a refusal of an input row."""
        self._refusals.append((row, refusal))

    def finish(self) -> Parsed:
        """Everything taken, ascending by row, with the tokens sorted."""
        tokens = tuple(sorted(self._tokens))
        rank = {token: i for i, token in enumerate(tokens)}
        remap = np.array([rank[t] for t in self._tokens], dtype=np.int32)
        codes = np.array(self._codes, dtype=np.int64)
        batch = CrystalBatch(
            cells=np.array(self._cells, np.float64).reshape(-1, 3, 3),
            offsets=np.concatenate([[0], np.cumsum(self._counts)]).astype(np.int64),
            positions=np.array(self._positions, np.float64).reshape(-1, 3),
            species=remap[codes] if len(codes) else np.zeros(0, np.int32),
            tokens=tokens,
            periodicity=np.array(self._periodicity, np.uint8),
        )
        rows = np.array(self._rows, dtype=np.int64)
        properties = self._properties
        if len(rows) > 1 and (np.diff(rows) < 0).any():
            from ..model.batch import select

            order = np.argsort(rows, kind="stable")
            batch, rows = select(batch, order), rows[order]
            properties = [properties[i] for i in order]
        refusals = tuple(sorted(self._refusals, key=lambda pair: pair[0]))
        return Parsed(batch, rows, refusals, tuple(properties))


def parse_each(texts: Sequence[str | None], parse_one: Callable[[BatchBuilder, int, str], None]) -> Parsed:
    """Run `parse_one(builder, row, text)` on every text; it adds one crystal or raises StructureRefused."""
    builder = BatchBuilder()
    for row, text in enumerate(texts):
        if text is None or not text or text.isspace():
            builder.refuse(row, Refusal("text_missing", "the record has no structure text"))
            continue
        try:
            parse_one(builder, row, text)
        except StructureRefused as refused:
            builder.refuse(row, refused.refusal)
        except Exception as error:
            # Whatever else a text provokes concerns that text alone: it must not stop the records beside it.
            builder.refuse(row, Refusal("text_unreadable", f"{type(error).__name__}: {error}"))
    return builder.finish()
