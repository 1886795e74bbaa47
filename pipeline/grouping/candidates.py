"""Candidates: every pair of one composition that a bound on distances cannot rule out.

The bound. Let A and B match with largest shift D and strain s, in the mean metric G = (G_A + G_B) / 2. For paired
sites p and q and any other paired sites p' and q', the vector q' - q is the image of p' - p under the lattice map plus
the difference of two shifts. The map changes lengths by a factor of at most exp(s). Since G_A >= exp(-2s) G_B, G >= (1
+ exp(-2s)) / 2 G_B >= exp(-s) G_B, so a shift of length D in G is at most exp(s/2) D long in G_B. Hence |q' - q| <=
exp(s) |p' - p| + c with c = 2 exp(s/2) D. The pairing is one to one and keeps species, so the k sites nearest to p
give k sites (of the same species each) within exp(s) d_k(p) + c of q:

    d_k(q) <= exp(s) d_k(p) + c,  and likewise with p and q exchanged,

for all neighbours and for the neighbours of one species. With y = ln(d + c / (exp(s) - 1)) this reads
|y_k(p) - y_k(q)| <= s, because exp(s) d + c + c / (exp(s) - 1) = exp(s) (d + c / (exp(s) - 1)).

What follows, in the order of the steps below; nothing that matches is lost in any:
1. the common cell has 1/n of the sites of every species per site of the crystal on either side, so means over the
   sites of a species are means over the common cell, whatever the two cells are. The bound is linear in d: it holds
   for the means;
2. the volumes per site differ by at most the sum of three logarithms of stretches: |ln(V_A / V_B)| <= 3 s, so ln(V) / 3
   is one coordinate more of the same Chebyshev ball;
3. sorting two columns of numbers paired within s leaves them within s, place by place;
4. every site has a partner whose row agrees, over all neighbours and by species.
Means are stored in float32 and rows are transformed to float32: the slack holds the rounding of both sides.

On crystals scaled to equal volume (`rescaled`, `isotypic`) the strain is shape strain and the same bound holds with the
window's own s; c is in the units of the scale. For a pair scaled to the geometric mean of its volumes per site, with D
in angstrom, everything is divided by that length. (A pair that matches within s as it is has strain at most 4 s / 3
there, (s, -s, -s) less its mean; it is found by the search that does not scale.)

Layers. The strain stretches the plane alone and heights are kept, so that a vector still changes its length by a factor
between exp(-s) and exp(s), and the sites nearest to p are those of the layer: all of the above holds word for word. The
cells of two layers share their third row (lattice/layer.py), so that the ratio of the volumes is that of the areas per
site, the product of two stretches: |ln(V_A / V_B)| <= 2 s, and the coordinate is ln(V) / 2. `rescaled` and `isotypic`
bring layers to one area per site, heights by the same factor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..fingerprint.distributions import Distributions, column_means, distributions
from ..kernels.rows_filter import close_counts, close_pairs, coordinates_close, pairs_allowed
from ..model.batch import CrystalBatch, Floats, Ints
from .preparation import Prepared, prepare, transform, transform_slack
from .window import Window

TREE_COLUMNS = (0, 5, 14, 33, 63)
"""Columns of the means that the tree holds (neighbouring columns say nearly the same); all of them are tested after."""

QUANTILE_COLUMNS = (0, 3, 11, 29)
"""Columns of the rows of which quantiles are taken."""

SPREAD_COLUMNS = 24
"""Coordinates that are compared first, those that spread most."""

ROUNDING = 1e-5
"""What coordinates in float32 may add to the slack."""

BLOCK = 2_000_000
"""Pairs handled at a time."""


@dataclass(frozen=True, slots=True)
class Candidates:
    """Pairs left, with what each step left of them."""

    pairs: Ints
    """(p, 2) int64, first < second, ascending."""

    steps: dict[str, int]
    """Pairs after each step: the coordinates that spread most, all of them, sorted columns, rows."""


def mean_coordinates(
    means: NDArray[np.float32], volumes: Floats, window: Window, periods: NDArray[np.uint8] | int = 3
) -> Floats:
    """(n, 1 + r k): ln(V)/3 and the transformed means; two crystals of a match differ by at most the slack in each.

    means (n, r, k): column means of each species of the centre, angstrom (or units of the scale); volumes (n,): per
    site; periods (n,): 3, or 2 for layers, whose first coordinate is ln(V)/2.
    """
    n = len(means)
    y = transform(means.astype(np.float64), window.shift, window.strain).reshape(n, -1)
    return np.concatenate([(np.log(volumes) / periods)[:, None], y], axis=1)


def quantile_coordinates(prepared: Prepared) -> Floats:
    """(n, w): quantiles over the sites of a species of some columns of its rows, transformed; same slack as the means.

    Sorted columns of two crystals of a match agree place by place, whatever the numbers of sites, so their quantiles
    do. Noise, which leaves means alone, moves them: they tell noisy copies apart.
    """
    c = prepared.crystals
    first, size = c.blocks[:, :-1], np.diff(c.blocks, axis=1)
    columns = [c for c in QUANTILE_COLUMNS if c < prepared.ordered.shape[1]]
    parts = [
        prepared.ordered[first + np.minimum((size * u).astype(np.int64), size - 1)][:, :, columns]
        for u in (0.0, 0.26, 0.51, 0.76, 1.0)
    ]
    return np.stack(parts, axis=2).reshape(len(first), -1).astype(np.float64)


def tree_columns(width: int, k: int) -> Ints:
    """Which of the coordinates of `mean_coordinates` the tree holds: the volume and TREE_COLUMNS of each species."""
    chosen = [0]
    for start in range(1, width, k):
        chosen += [start + c for c in TREE_COLUMNS if c < k]
    return np.array(chosen, dtype=np.int64)


def coordinates_agree(coordinates: Floats, pairs: Ints, slack: float) -> NDArray[np.bool_]:
    """Which pairs agree to the slack in every coordinate; quantiles are looked at first, they tell most."""
    return coordinates_close(coordinates, pairs, slack)


def allowed_pairs(prepared: Prepared, pairs: Ints) -> tuple[NDArray[np.bool_], int]:
    """Which of the pairs the sorted columns and the rows cannot rule out, and how many the columns left."""
    c = prepared.crystals
    allowed, columns = pairs_allowed(
        pairs, c.blocks, c.rows, prepared.ordered, prepared.grouped, prepared.counts, c.slack
    )
    return allowed, int(columns)


@dataclass(frozen=True, slots=True)
class Search:
    """A batch of one composition made ready for one window: what candidates are looked for in, and verified on."""

    window: Window
    """In the units of `scales`."""

    rows: Distributions
    """Distances of the batch as it came."""

    scales: Floats
    """(n,): factor on the lengths of each crystal."""

    prepared: Prepared
    """At those scales."""

    coordinates: Floats
    """(n, w): transformed means, then quantiles; crystals of a match agree to `slack` in every one."""

    slack: float


def start_search(
    batch: CrystalBatch, window: Window, scales: Floats | None = None, rows: Distributions | None = None
) -> Search:
    """Prepare a batch of one composition. scales (n,): factor on the lengths of each crystal, default 1; rows:
    distances of the batch as it came, computed where not given."""
    found = rows if rows is not None else distributions(batch)
    scales = np.ones(len(batch)) if scales is None else scales
    prepared = prepare(batch, window, scales, found)
    means = column_means(batch, found).means
    k = means.shape[1]
    scaled = means.reshape(len(batch), -1, k) * scales[:, None, None].astype(np.float32)
    averages = mean_coordinates(scaled, prepared.volumes, window, batch.periodicity)
    coordinates = np.concatenate([averages, quantile_coordinates(prepared)], axis=1)
    return Search(window, found, scales, prepared, coordinates, transform_slack(window.strain))


def spread_first(coordinates: Floats, columns: int | None = SPREAD_COLUMNS) -> tuple[Ints, NDArray[np.float32]]:
    """(order, points): rows in the order of the coordinate that spreads most, and of each the coordinates that spread
    most (None: all), in float32: pairs that are close in all coordinates lie in an interval, and most others differ in
    one of the first few."""
    widest = np.argsort(-np.ptp(coordinates, axis=0), kind="stable") if len(coordinates) else np.arange(1)
    order = np.argsort(coordinates[:, widest[0]], kind="stable")
    return order, np.ascontiguousarray(coordinates[order][:, widest[:columns]], dtype=np.float32)


def filtered(prepared: Prepared, coordinates: Floats, pairs: Ints, slack: float) -> Ints:
    """Those of the pairs that no bound rules out, ascending."""
    kept = []
    for start in range(0, len(pairs), BLOCK):
        part = pairs[start : start + BLOCK]
        part = part[coordinates_agree(coordinates, part, slack)]
        kept.append(part[allowed_pairs(prepared, part)[0]])
    left = np.concatenate(kept) if kept else np.zeros((0, 2), np.int64)
    return left[np.lexsort((left[:, 1], left[:, 0]))]


def candidate_pairs(search: Search) -> Candidates:
    """Every pair of a batch of one composition that could match within the window."""
    order, points = spread_first(search.coordinates)
    slack = search.slack + ROUNDING
    listed = int(close_counts(points, slack).sum()) // 2
    pairs = np.sort(order[close_pairs(points, slack, np.zeros(len(order), np.bool_), listed)], axis=1)
    agree = pairs[coordinates_agree(search.coordinates, pairs, search.slack)]
    allowed, columns = allowed_pairs(search.prepared, agree)
    left = agree[allowed]
    left = left[np.lexsort((left[:, 1], left[:, 0]))]
    return Candidates(left, {"spread": len(pairs), "means": len(agree), "columns": columns, "rows": len(left)})
