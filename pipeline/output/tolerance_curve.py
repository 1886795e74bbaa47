"""How many families there are at every tolerance: t times the limits of `near`, from 0 to the end of the window.

The t of a match is max(shift / near_shift, strain / near_strain) of its recorded measures: a limit of t on it is one
of near_shift and near_strain, both multiplied by t. Families at t are the components of equal keys and matches up to t;
a minimum spanning forest in t (Kruskal 1956) has the same components at every t, so that its edges are all the steps
of the curve. What that proves, with what `matches` promises:

- at t = 1 families and groups are those of grade near: the forest is stored, and every set-aside record with its kept
  one (groups.py: a record that is kept has no earlier kept match, and one that is not finds its own);
- below 1 families are exact while no composition was grouped as a crowd, because the forest is one in t;
- all else is exact while no record has more matches in the window than are stored;
- elsewhere matches may be missing, which could only join families: the count is an upper bound. `more` counts the
  records concerned.

A pair of crystals that match in two ways is taken by its recorded match, the strictest grade's smallest shift; a run
with narrower limits may find the other one. Records pinned together count as one at every t, records pinned apart as
no match. Read-only: what is made are temporary tables.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb
import numpy as np
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import minimum_spanning_tree

from ..grouping.digest import PAIR_PINS
from ..grouping.groups import stars
from ..grouping.rank import rank_records
from ..model.batch import Floats, Ints
from ..settings import Settings
from ..store.rows import one_number
from ..store.stages import stored_settings

COUNTED_AT = 10
"""Tolerances at which groups are counted too."""

PLATEAUS = 3
"""So many of the longest stretches without a change are named."""

_PINNED = (
    f"(SELECT * FROM {PAIR_PINS} WHERE kind = 'apart' OR pin_id NOT IN (SELECT pin_id FROM refused_pins))"
)  # fmt: skip

_NODES = f"""
CREATE OR REPLACE TEMP TABLE curve_nodes AS
SELECT row_number() OVER (ORDER BY crystal_key, single) - 1 AS node, * FROM (
    SELECT f.crystal_key,
           CASE WHEN p.record_id IS NULL THEN '' ELSE f.record_id END AS single,
           min(k.rank) AS rank
    FROM members m
    JOIN canonical_forms f USING (record_id)
    JOIN ranks k USING (record_id)
    LEFT JOIN (SELECT record_a AS record_id FROM {_PINNED} UNION SELECT record_b FROM {_PINNED}) p USING (record_id)
    WHERE m.grade = 'near'
    GROUP BY ALL
)"""

_EDGES = f"""
WITH found AS (
    SELECT a.node AS node_a, b.node AS node_b, a.single AS single_a, b.single AS single_b,
           greatest(m.{{shift}} / $near_shift, m.{{strain}} / $near_strain) AS t
    FROM matches m
    JOIN curve_nodes a ON a.crystal_key = m.crystal_key_a
    JOIN curve_nodes b ON b.crystal_key = m.crystal_key_b
    UNION ALL
    SELECT a.node, b.node, a.single, b.single, 0.0
    FROM curve_nodes a JOIN curve_nodes b ON a.crystal_key = b.crystal_key AND a.node < b.node
),
allowed AS (
    SELECT f.* FROM found f
    LEFT JOIN {_PINNED} p
      ON p.kind = 'apart' AND p.record_a = least(single_a, single_b) AND p.record_b = greatest(single_a, single_b)
    WHERE p.kind IS NULL AND f.t <= $window
    UNION ALL
    SELECT a.node, b.node, a.single, b.single, 0.0
    FROM {_PINNED} p JOIN curve_nodes a ON a.single = p.record_a JOIN curve_nodes b ON b.single = p.record_b
    WHERE p.kind = 'together'
)
SELECT least(node_a, node_b) AS first, greatest(node_a, node_b) AS second, min(t) AS t
FROM allowed GROUP BY ALL ORDER BY ALL"""


@dataclass(frozen=True, slots=True)
class Plateau:
    """A stretch of t in which the number of families does not change."""

    start: float
    end: float
    families: int


@dataclass(frozen=True, slots=True)
class ToleranceCurve:
    """The number of families as a function of t: `nodes` less the number of steps up to t."""

    nodes: int
    """Crystals that nothing joins below every t: distinct keys, and the records that a pin names."""

    steps: Floats
    """(s,) t at which two families become one, ascending, up to `window`."""

    window: float
    """window_factor: the curve ends here."""

    near_shift: float
    """Angstrom; t = 1."""

    near_strain: float

    counted_at: Floats
    """(10,) tolerances t at which groups were counted."""

    groups: Ints
    """(10,) groups, as stars in keep order over the stored matches."""

    more: int
    """Records with more matches in the window than are stored; 0: the curve is exact."""

    def families(self, t: float) -> int:
        """Number of families at t."""
        return self.nodes - int(np.searchsorted(self.steps, t, side="right"))

    def plateaus(self) -> list[Plateau]:
        """The longest stretches without a change, longest first; equal ones by their start."""
        ends = np.unique(np.concatenate([[0.0], self.steps, [self.window]]))
        order = np.argsort(-np.diff(ends), kind="stable")[:PLATEAUS]
        return [Plateau(float(ends[i]), float(ends[i + 1]), self.families(float(ends[i]))) for i in order.tolist()]

    def rows(self) -> list[tuple[Any, ...]]:
        """t, shift (angstrom), strain, families, groups: one row for each of `counted_at`."""
        return [
            (t, t * self.near_shift, t * self.near_strain, self.families(t), groups)
            for t, groups in zip(self.counted_at.tolist(), self.groups.tolist(), strict=True)
        ]

    def as_json(self) -> dict[str, Any]:
        """Everything but the single steps, ready for json.dumps."""
        names = ("t", "shift_angstrom", "strain", "families", "groups")
        return {
            "crystals": self.nodes,
            "window": self.window,
            "rows": [dict(zip(names, row, strict=True)) for row in self.rows()],
            "plateaus": [{"from": p.start, "to": p.end, "families": p.families} for p in self.plateaus()],
            "records_with_more_matches": self.more,
        }


COLUMNS = ("t", "shift_angstrom", "strain", "families", "groups")
"""Of `ToleranceCurve.rows`."""


def tolerance_curve(connection: duckdb.DuckDBPyConnection) -> ToleranceCurve | None:
    """The curve of a store, under its own settings; None where nothing is grouped at grade near."""
    if not one_number(connection, "SELECT count(*) FROM members WHERE grade = 'near'"):
        return None
    settings = Settings.model_validate(stored_settings(connection))
    rank_records(connection, settings)
    connection.execute(_NODES)
    separate = settings.mirror_images == "separate"
    shift, strain = ("proper_shift_angstrom", "proper_strain") if separate else ("largest_shift_angstrom", "strain")
    values = {
        "near_shift": settings.near_shift,
        "near_strain": settings.near_strain,
        "window": settings.window_factor * (1 + 1e-12),
    }
    found = connection.execute(_EDGES.format(shift=shift, strain=strain), values).fetchnumpy()
    edges = np.stack([np.asarray(found["first"], np.int64), np.asarray(found["second"], np.int64)], axis=1)
    t = np.minimum(np.asarray(found["t"], np.float64), settings.window_factor)
    ranks = connection.execute("SELECT rank FROM curve_nodes ORDER BY node").fetchnumpy()["rank"]
    rank = np.argsort(np.argsort(np.asarray(ranks, np.int64), kind="stable"), kind="stable").astype(np.int64)
    at = counted_at(settings.window_factor)
    return ToleranceCurve(
        nodes=len(rank),
        steps=forest_steps(len(rank), edges, t),
        window=settings.window_factor,
        near_shift=settings.near_shift,
        near_strain=settings.near_strain,
        counted_at=at,
        groups=np.array([len(np.unique(stars(len(rank), rank, edges[t <= x]))) for x in at.tolist()], np.int64),
        more=one_number(connection, "SELECT count(*) FROM more_matches"),
    )


def counted_at(window: float) -> Floats:
    """(10,) ascending: half of them up to t = 1, half beyond up to the window; all up to 1 where there is no window."""
    if window <= 1.0:
        return np.arange(1, COUNTED_AT + 1) / COUNTED_AT
    half = np.arange(1, COUNTED_AT // 2 + 1) / (COUNTED_AT // 2)
    return np.concatenate([half, 1.0 + (window - 1.0) * half])


def forest_steps(nodes: int, edges: Ints, t: Floats) -> Floats:
    """(s,) ascending: t of the edges (e, 2), first < second and each pair once, of a minimum spanning forest.

    At every x, nodes less the steps up to x is the number of components of the edges up to x.
    """
    order = np.argsort(t, kind="stable")
    weight = np.empty(len(t))
    weight[order] = np.arange(1, len(t) + 1)  # places, because the sparse matrix has no edge of weight 0
    graph = coo_matrix((weight, (edges[:, 0], edges[:, 1])), shape=(nodes, nodes)).tocsr()
    places = np.sort(minimum_spanning_tree(graph).data.astype(np.int64))
    return np.asarray(t[order][places - 1], dtype=np.float64)
