"""The two records of a witness as the store has them: as they came, and in canonical form. Read-only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb
import numpy as np
from numpy.typing import NDArray

from ..errors import StoreError
from ..store.rows import one_row

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Side:
    """One record of a pair.

    The way back from the canonical form: given cell = K L R, and K given position = canonical position of the mapped
    site + site shift + origin, up to `residual` angstrom (rows; given positions as row vectors times K). For a
    layer the given structure is first put upright (cell/canonical.py).
    """

    record_id: str
    source: str
    label: str
    file: str
    formula: str
    composition: str
    periodicity: int
    content_hash: str
    crystal_key: str

    given_cell: Floats
    """(3, 3), angstrom, rows."""

    given_tokens: list[str]
    """(g,)"""

    given_positions: Floats
    """(g, 3), fractional in the given cell."""

    cell: Floats
    """L (3, 3): reduced cell, angstrom, rows."""

    tokens: list[str]
    """(n,)"""

    positions: Floats
    """(n, 3), fractional in the reduced cell."""

    matrix: Ints
    """K (3, 3)."""

    rotation: Floats
    """R (3, 3)."""

    origin: Floats
    """(3,), fractions of the reduced cell."""

    site_map: Ints
    """(g,): canonical site of each given site, from 0."""

    site_shift: Ints
    """(g, 3): lattice translation to it, in the reduced cell."""

    residual: float
    """Angstrom."""

    @property
    def name(self) -> str:
        """`source:label`, as a person types it."""
        return f"{self.source}:{self.label}"

    @property
    def volume_per_site(self) -> float | None:
        """Cubic angstrom; None for a layer."""
        return abs(float(np.linalg.det(self.cell))) / len(self.tokens) if self.periodicity == 3 else None

    @property
    def area_per_site(self) -> float | None:
        """Square angstrom of a layer; None for a bulk crystal."""
        if self.periodicity == 3:
            return None
        return float(np.linalg.norm(np.cross(self.cell[0], self.cell[1]))) / len(self.tokens)

    @property
    def size_told(self) -> str:
        """Volume per site, or area per site of a layer, with its unit."""
        volume = self.volume_per_site
        return f"{volume:.4f} Å3" if volume is not None else f"{self.area_per_site:.4f} Å2"

    def given_sites(self, site: int) -> list[int]:
        """Numbers, from 1, of the given sites that are images of a canonical site (from 0)."""
        return [int(i) + 1 for i in np.flatnonzero(self.site_map == site)]

    def as_json(self) -> dict[str, Any]:
        """All of it, ready for json.dumps; matrices as rows."""
        return {
            "record_id": self.record_id,
            "source": self.source,
            "label": self.label,
            "file": self.file,
            "formula": self.formula,
            "composition": self.composition,
            "periodicity": self.periodicity,
            "content_hash": self.content_hash,
            "crystal_key": self.crystal_key,
            "volume_angstrom3_per_site": self.volume_per_site,
            "area_angstrom2_per_site": self.area_per_site,
            "given": {
                "cell_angstrom": self.given_cell.tolist(),
                "species": self.given_tokens,
                "positions_fractional": self.given_positions.tolist(),
            },
            "reduced": {
                "cell_angstrom": self.cell.tolist(),
                "species": self.tokens,
                "positions_fractional": self.positions.tolist(),
            },
            "way_back": {
                "matrix": self.matrix.tolist(),
                "rotation": self.rotation.tolist(),
                "origin_fractional": self.origin.tolist(),
                "site_map": self.site_map.tolist(),
                "site_shift": self.site_shift.tolist(),
                "residual_angstrom": self.residual,
            },
        }


def side_of(connection: duckdb.DuckDBPyConnection, record_id: str) -> Side:
    """The record of that id. Raises StoreError where its structure is not there."""
    row = one_row(
        connection,
        "SELECT r.source, r.label, r.file, r.formula, r.composition, r.periodicity, r.content_hash, f.crystal_key, "
        "s.cell_angstrom, s.species, s.positions_fractional, f.cell_angstrom, f.species, f.positions_fractional, "
        "f.matrix, f.rotation, f.origin_fractional, f.site_map, f.site_shift, f.residual_angstrom "
        "FROM records r JOIN structures s USING (record_id) JOIN canonical_forms f USING (record_id) "
        "WHERE r.record_id = ?",
        [record_id],
    )
    if row is None:
        raise StoreError(f"The store has no structure of record {record_id}. Examine it with: lattice-census check")
    source, label, file, formula, composition, periodicity, content, key = row[:8]
    return Side(
        record_id=record_id,
        source=source,
        label=label,
        file=file,
        formula=formula,
        composition=composition,
        periodicity=int(periodicity),
        content_hash=content,
        crystal_key=key,
        given_cell=_rows(row[8]),
        given_tokens=list(row[9]),
        given_positions=_rows(row[10]),
        cell=_rows(row[11]),
        tokens=list(row[12]),
        positions=_rows(row[13]),
        matrix=np.array(row[14], np.int64).reshape(3, 3),
        rotation=_rows(row[15]),
        origin=np.array(row[16], np.float64),
        site_map=np.array(row[17], np.int64),
        site_shift=np.array(row[18], np.int64).reshape(-1, 3),
        residual=float(row[19]),
    )


def _rows(values: Any) -> Floats:
    return np.array(values, np.float64).reshape(-1, 3)
