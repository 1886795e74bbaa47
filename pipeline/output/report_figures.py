"""The figures of a report that are about the whole store: map of the lattices, given cells, tolerance curve."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import duckdb
import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, StrMethodFormatter
from numpy.typing import NDArray

from ..lattice.bravais import ALL_TYPES
from ..model.batch import Floats
from .svg import ACCENT, COLOURS, INK, MARKERS, PALE
from .tolerance_curve import ToleranceCurve

MOST_VECTORS = 1500
"""Beyond so many points the map's points are one image in the figure, so that the page stays small."""

CROWDED = 3000
"""From so many points on, the map's marks are smaller."""

LATTICES = """
SELECT any_value(x.lattice_type) AS lattice_type,
       any_value(x.a_angstrom / x.b_angstrom) AS a_to_b,
       any_value(x.b_angstrom / x.c_angstrom) AS b_to_c,
       any_value(x.volume_angstrom3_per_site * r.sites_primitive / (x.a_angstrom * x.b_angstrom * x.c_angstrom)) AS fill
FROM current_records r JOIN crystals x USING (record_id)
WHERE r.periodicity = 3 AND x.lattice_type IS NOT NULL AND x.a_angstrom > 0
GROUP BY x.crystal_key
ORDER BY x.crystal_key"""

LAYERS = """
SELECT any_value(x.lattice_type) AS lattice_type,
       any_value(least(x.a_angstrom, x.b_angstrom) / greatest(x.a_angstrom, x.b_angstrom)) AS a_to_b,
       any_value(sin(radians(x.gamma_deg))) AS fill
FROM current_records r JOIN crystals x USING (record_id)
WHERE r.periodicity = 2 AND x.lattice_type IS NOT NULL AND x.a_angstrom > 0
GROUP BY x.crystal_key
ORDER BY x.crystal_key"""


@dataclass(frozen=True, slots=True)
class LatticeMap:
    """One row a distinct crystal with three periodic directions."""

    lattice_type: NDArray[np.str_]
    """(n,)"""

    a_to_b: Floats
    """(n,): first over second edge of the reduced cell, a <= b <= c."""

    b_to_c: Floats
    """(n,)"""

    openness: Floats
    """(n,): V / (a b c), 1 for a cell of right angles."""


def lattice_map(connection: duckdb.DuckDBPyConnection) -> LatticeMap:
    """The shapes of all reduced cells. Read-only."""
    rows = connection.execute(LATTICES).fetchall()
    columns = list(zip(*rows, strict=True)) if rows else [(), (), (), ()]
    return LatticeMap(np.array(columns[0], dtype=str), *(np.array(c, np.float64) for c in columns[1:]))


@dataclass(frozen=True, slots=True)
class LayerMap:
    """One row a distinct layer."""

    lattice_type: NDArray[np.str_]
    """(n,)"""

    a_to_b: Floats
    """(n,): shorter over longer edge of the reduced cell in the plane."""

    openness: Floats
    """(n,): area / (a b), 1 for a right angle."""


def layer_map(connection: duckdb.DuckDBPyConnection) -> LayerMap:
    """The shapes of the reduced plane cells of all layers. Read-only."""
    rows = connection.execute(LAYERS).fetchall()
    columns = list(zip(*rows, strict=True)) if rows else [(), (), ()]
    return LayerMap(np.array(columns[0], dtype=str), *(np.array(c, np.float64) for c in columns[1:]))


def layer_figure(shapes: LayerMap) -> Figure:
    """The one plane that the shape of a plane cell has: its edges against its angle."""
    return _map(shapes.lattice_type, shapes.a_to_b, shapes.openness, "a / b", "area / (a b)")


def map_figures(shapes: LatticeMap) -> tuple[Figure, Figure]:
    """Two planes of the same points: the edges against the angles, and the edges against one another."""
    return (
        _map(shapes.lattice_type, shapes.a_to_b * shapes.b_to_c, shapes.openness, "a / c", "V / (a b c)"),
        _map(shapes.lattice_type, shapes.a_to_b, shapes.b_to_c, "a / b", "b / c"),
    )


def _map(lattice_type: NDArray[np.str_], x: Floats, y: Floats, x_name: str, y_name: str) -> Figure:
    figure = Figure(figsize=(4.6, 4.4), layout="constrained")
    axes = figure.add_subplot()
    present = set(lattice_type.tolist())
    types = [t for t in ALL_TYPES if t in present] + sorted(present - set(ALL_TYPES))
    counts = {name: int((lattice_type == name).sum()) for name in types}
    rare_last = sorted(types, key=lambda name: -counts[name])  # many points do not hide few
    for name in types:
        rows = lattice_type == name
        i = ALL_TYPES.index(name) if name in ALL_TYPES else len(ALL_TYPES)
        axes.plot(
            x[rows], y[rows], linestyle="none", marker=MARKERS[i % len(MARKERS)],
            markersize=6 if len(x) < CROWDED else 4, zorder=2 + rare_last.index(name) / 100,
            color=COLOURS[i % len(COLOURS)], markeredgecolor="white", markeredgewidth=0.4, alpha=0.85,
            rasterized=len(x) > MOST_VECTORS, label=f"{name} ({counts[name]:,})", clip_on=False,
        )  # fmt: skip
    axes.set_xlim(*_range_below_one(x))
    axes.set_ylim(*_range_below_one(y))
    axes.set_xlabel(f"{x_name} of the reduced cell")
    axes.set_ylabel(f"{y_name} of the reduced cell")
    if types:
        figure.legend(loc="outside lower center", ncols=4, fontsize=9, handletextpad=0.2, columnspacing=0.9,
                      markerscale=1.0 if len(x) < CROWDED else 1.5)  # fmt: skip
    figure.set_dpi(200)  # of points that are one image
    return figure


def _range_below_one(values: Floats) -> tuple[float, float]:
    """Limits of an axis of ratios that 1 is the end of: never so narrow that rounding is drawn as a difference."""
    least = min(float(values.min(initial=1.0)), 0.9)
    room = 0.04 * (1.0 - least)
    return least - room, 1.0 + room


def curve_figure(curve: ToleranceCurve) -> Figure:
    """Families as steps, groups as points, the longest plateaus shaded, the chosen tolerance drawn in."""
    figure = Figure(figsize=(4.9, 3.6), layout="constrained")
    axes = figure.add_subplot()
    t, families = curve_points(curve)
    longest = curve.plateaus()
    for i, plateau in enumerate(longest):
        axes.axvspan(plateau.start, plateau.end, color="#d3e0e8", linewidth=0, zorder=0,
                     label="longest plateaus" if i == 0 else None)  # fmt: skip
    axes.step(t, families, where="post", color=COLOURS[0], linewidth=1.6, label="families", zorder=2)
    axes.plot(curve.counted_at, curve.groups, linestyle="none", marker="s", markersize=4.5, color=COLOURS[3],
              markerfacecolor="none", label="groups", zorder=3, clip_on=False)  # fmt: skip
    axes.axvline(1.0, color=ACCENT, linewidth=1.3, linestyle=(0, (5, 2)), label="chosen tolerance", zorder=1)
    axes.set_xlim(0, curve.window)
    if not len(curve.steps):
        axes.set_ylim(0, 1.2 * max(curve.nodes, 1))
    axes.set_xlabel("t (times the limits of near)")
    axes.set_ylabel("number of families and groups")
    axes.yaxis.set_major_locator(MaxNLocator(nbins=7, integer=True))
    axes.yaxis.set_major_formatter(StrMethodFormatter("{x:,.0f}"))
    shift = axes.secondary_xaxis(
        "top", functions=(lambda v: np.asarray(v) * curve.near_shift, lambda v: np.asarray(v) / curve.near_shift)
    )
    shift.set_xlabel("largest shift (Å)")
    figure.legend(loc="outside lower center", ncols=2, fontsize=9, columnspacing=1.2)
    return figure


def curve_points(curve: ToleranceCurve) -> tuple[Floats, Floats]:
    """Corners of the steps: t (m,) ascending from 0 to the window, and the families from each on (m,)."""
    t = np.unique(np.concatenate([[0.0], curve.steps, [curve.window]]))
    return t, np.array([curve.families(x) for x in t.tolist()], dtype=np.float64)


def size_figure(rows: Sequence[tuple[Any, ...]]) -> Figure:
    """Records by how many primitive cells their given cell holds: rows (cells, records)."""
    figure = Figure(figsize=(4.6, 2.8), layout="constrained")
    axes = figure.add_subplot()
    names = [f"{cells:g}" for cells, _ in rows]
    numbers = [int(n) for _, n in rows]
    bars = axes.bar(range(len(rows)), numbers, color=[COLOURS[0] if n == "1" else PALE for n in names], width=0.7,
                    edgecolor=INK, linewidth=0.6)  # fmt: skip
    small = 8 if len(rows) <= 10 else 6
    axes.bar_label(bars, labels=[f"{n:,}" for n in numbers], fontsize=small, padding=1)
    axes.set_xticks(range(len(rows)), names, fontsize=9 if len(rows) <= 16 else 7)
    axes.set_xlim(-0.6, max(len(rows), 5) - 0.4)  # few bars are no wider than many
    axes.set_xlabel("primitive cells in the given cell")
    axes.set_ylabel("records")
    most = max(numbers, default=1)
    axes.set_yscale("symlog", linthresh=10)
    axes.set_ylim(0, most * 2)
    ticks = [0] + [10**i for i in range(1, 10) if 10**i <= most * 2]
    axes.set_yticks(ticks, [f"{n:,}" for n in ticks])
    axes.minorticks_off()
    return figure
