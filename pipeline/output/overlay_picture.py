"""The picture of an overlay: the common cell along its best axis, shifts as arrows, and a scale bar in angstrom."""

from __future__ import annotations

import numpy as np
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure

from ..model.batch import Floats, Ints
from .overlay import Overlay, plane_along, with_images
from .svg import COLOURS, INK, MARKERS, PALE

MOST_SITES = 400
"""A common cell of more sites is not drawn: nothing could be told apart."""

FACTORS = (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000)
"""By how much arrows may be drawn longer than they are."""

BARS = (0.5, 1.0, 2.0, 5.0, 10.0, 20.0)
"""Lengths that a scale bar may have, angstrom."""

WIDTH_INCHES, MOST_HEIGHT = 3.6, 2.6
WORDS_INCHES = (2.9, 0.45)
"""Width and height that the words below the scale bar need."""

SMALLEST_SHIFT = 5e-5
"""Shifts below this (angstrom) are what equal keys leave open, are printed as 0.0000, and are not drawn."""


def factor_for(distances: Floats, span: float) -> int:
    """How much longer arrows are drawn: the largest factor that keeps them within an eighth of the picture."""
    largest = float(distances.max(initial=0.0))
    if largest < SMALLEST_SHIFT:
        return 1
    return max((f for f in FACTORS if f * largest <= span / 8), default=1)


def bar_for(span: float) -> float:
    """Length of the scale bar in angstrom: the longest within two fifths of the picture."""
    return max((b for b in BARS if b <= 0.4 * span), default=BARS[0])


def overlay_figure(found: Overlay) -> tuple[Figure, int]:
    """The picture and the factor of its arrows. Lines with gid `shifts` are the arrows, with gid `bar` the bar.

    All are drawn in one plane at one scale: a length in the plane times the factor is the length of its arrow, measured
    by the bar.
    """
    plane = plane_along(found.cell, found.axis)
    corners = np.array([[i, j, k] for i in (0, 1) for j in (0, 1) for k in (0, 1)], float)
    flat_corners = corners @ found.cell @ plane.T
    sites, which = with_images(found.sites)
    flat = sites @ found.cell @ plane.T
    arrows = (found.delta @ found.cell @ plane.T)[which]
    low, high = np.minimum(flat_corners.min(axis=0), flat.min(axis=0)), np.maximum(flat_corners.max(axis=0),
                                                                                  flat.max(axis=0))  # fmt: skip
    span = float((high - low).max())
    factor = factor_for(found.distances, span)
    tips = flat + factor * arrows
    low, high = np.minimum(low, tips.min(axis=0)), np.maximum(high, tips.max(axis=0))
    room = 0.06 * span
    low, high = low - np.array([room, room]), high + room
    scale = float(min(WIDTH_INCHES / (high - low)[0], MOST_HEIGHT / (high - low)[1]))  # inches an angstrom
    wider = max(0.0, WORDS_INCHES[0] / scale - (high - low)[0]) / 2
    low, high = low - np.array([wider, WORDS_INCHES[1] / scale]), high + np.array([wider, 0.0])
    figure = Figure(figsize=tuple((high - low) * scale))
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_xlim(low[0], high[0])
    axes.set_ylim(low[1], high[1])
    axes.set_axis_off()

    edges = [(i, j) for i in range(8) for j in range(i) if np.abs(corners[i] - corners[j]).sum() == 1]
    axes.add_collection(
        LineCollection([flat_corners[[i, j]] for i, j in edges], colors=PALE, linewidths=0.8, zorder=1)
    )  # fmt: skip
    _sites(axes, found, flat, tips, which)
    drawn = np.linalg.norm(arrows, axis=1) * factor > 0.004 * span
    shafts = LineCollection(np.stack([flat, tips], axis=1)[drawn], colors=INK, linewidths=1.1, zorder=4)
    shafts.set_gid("shifts")
    axes.add_collection(shafts)
    heads = _heads(flat[drawn], tips[drawn], 0.022 * span)
    axes.add_collection(LineCollection(heads, colors=INK, linewidths=1.1, zorder=4))

    bar = bar_for(span)
    start = (low[0] + room, low[1] + WORDS_INCHES[1] / scale)
    (line,) = axes.plot([start[0], start[0] + bar], [start[1]] * 2, color=INK, linewidth=2.2, solid_capstyle="butt",
                        zorder=5)  # fmt: skip
    line.set_gid("bar")
    told = f"between sites: {bar:g} Å"
    if factor > 1:
        told += f"\nof an arrow: {bar / factor:g} Å ({factor} times as long)"
    axes.text(start[0], start[1] - 0.05 / scale, told, va="top", ha="left", fontsize=9, color=INK)
    return figure, factor


def _sites(axes: object, found: Overlay, flat: Floats, tips: Floats, which: Ints) -> None:
    """Kept sites filled, set-aside ones outlined at the tips; species by colour and marker."""
    tokens = np.array(found.tokens)[which]
    for i, token in enumerate(sorted(set(found.tokens))):
        rows = tokens == token
        colour, marker = COLOURS[i % len(COLOURS)], MARKERS[i % len(MARKERS)]
        style = {"marker": marker, "linestyle": "none", "markersize": 7}
        axes.plot(*flat[rows].T, color=colour, markeredgewidth=0, zorder=2, **style)  # type: ignore[attr-defined]
        axes.plot(*tips[rows].T, color="none", markeredgecolor=colour, markeredgewidth=1.1, zorder=3,  # type: ignore[attr-defined]
                  **style)  # fmt: skip


def _heads(start: Floats, end: Floats, length: float) -> list[Floats]:
    """Two strokes at the end of each arrow, (3, 2) each."""
    heads = []
    for a, b in zip(start, end, strict=True):
        along = (b - a) / np.linalg.norm(b - a)
        side = np.array([-along[1], along[0]])
        back = min(length, float(np.linalg.norm(b - a)) * 0.5)
        heads.append(np.stack([b - back * (along + 0.5 * side), b, b - back * (along - 0.5 * side)]))
    return heads
