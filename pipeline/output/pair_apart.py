"""What keeps two records apart: the first thing that rules a match out, with its number against the limit.

The steps are those of the search, in its order: what a match requires outright (pair_outright.py), the bounds of
grouping/candidates.py (volume, means, sorted columns, rows), a common lattice, and the shift. The bounds are taken
again in plain NumPy, for one pair, so that each has a number. Distances are compared by y = ln(d + c / (exp(s) - 1)),
in which the bound reads |y_A - y_B| <= s.

This module imports kernels: only `witness` needs it.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from ..fingerprint.distributions import column_means
from ..grouping.candidates import Search, mean_coordinates, start_search
from ..grouping.preparation import SMALLEST_STRAIN, Prepared
from ..grouping.window import Window, near_window
from ..tolerances import Tolerances
from .pair_match import PairMatch, batch_of, match_of
from .pair_outright import Apart, outright
from .pair_sides import Side

Floats = NDArray[np.float64]

WIDER = (2.0, 4.0, 8.0)
"""The closest match is looked for in windows so many times as wide as that of the store, until one is found."""

WIDEST_SHIFT, WIDEST_STRAIN = 0.6, 0.12
"""And no wider than this (angstrom; dimensionless): beyond, a pairing says nothing."""

MOST_SITES = 200
"""Primitive sites up to which the closest match is looked for: the cost grows fast with a wide window."""

LATTICE_REACH = 0.25
"""Strain up to which the nearest common lattice is looked for."""


def what_keeps_apart(a: Side, b: Side, tolerances: Tolerances, mirror_images: str) -> Apart:
    """Why two records without a match in the window have none."""
    without = outright(a, b)
    if without is not None:
        return without
    search = start_search(batch_of(a, b), near_window(tolerances))
    bound = _first_bound(a, b, search) or _lattice(search, a, b)
    if bound is not None:
        return Apart(*bound, *_closest(a, b, tolerances, mirror_images, strained=True))
    # There is a common lattice: how far the sites are from each other on it.
    closest, shift, strain = _closest(a, b, tolerances, mirror_images, strained=False)
    limit = search.window.shift
    if closest is None:
        message = f"they have a common lattice, but no pairing that shifts no site by more than {shift or limit:g} Å"
        return Apart("shift", message, None, limit, None, shift, strain)
    message = f"the smallest largest shift is {closest.largest_shift:.4f} Å; the window ends at {limit:g} Å"
    return Apart("shift", message, closest.largest_shift, limit, closest, shift, strain)


Bound = tuple[str, str, float, float]


def _first_bound(a: Side, b: Side, search: Search) -> Bound | None:
    """The first bound that rules the pair out."""
    window, prepared, slack = search.window, search.prepared, search.slack
    periods = a.periodicity
    logs = np.log(prepared.volumes) / periods
    apart = abs(float(logs[0] - logs[1]))
    if apart > slack:
        ratio, most = math.exp(periods * apart), math.exp(periods * window.strain)
        return (
            "volume",
            f"the {'volumes' if periods == 3 else 'areas'} per site are {a.size_told} and {b.size_told}, "
            f"a ratio of {ratio:.4f}; "
            f"a strain of {window.strain:g} allows up to {most:.4f}",
            ratio,
            most,
        )
    kinds = list(dict.fromkeys(sorted(a.tokens)))
    means = column_means(prepared.batch, search.rows).means
    k = means.shape[1]
    coordinates = mean_coordinates(means.reshape(2, -1, k), prepared.volumes, window, periods)[:, 1:]
    place = int(np.argmax(np.abs(coordinates[0] - coordinates[1])))
    value = abs(float(coordinates[0, place] - coordinates[1, place]))
    if value > slack:
        which = f"{_ordinal(place % k + 1)} neighbour of the {kinds[place // k]} sites"
        return "means", _told(f"the mean distance to the {which}", coordinates[:, place], window), value, slack
    worst = _columns(prepared)
    if worst[0] > slack:
        value, kind, column, y = worst
        which = f"the distances to the {_ordinal(column + 1)} neighbour of the {kinds[kind]} sites, in ascending order,"
        return "columns", _told(f"one of {which}", np.array(y), window), value, slack
    value, side, site = _rows(prepared)
    if value > slack:
        first, second = (a, b) if side == 0 else (b, a)
        names = ("A", "B") if side == 0 else ("B", "A")
        given = ", ".join(str(i) for i in first.given_sites(site))
        return (
            "rows",
            f"no site of {names[1]} has the neighbours of the {first.tokens[site]} site {given} of {names[0]} "
            f"({len(second.tokens)} tried): the distances of the best differ by {value:.4f} on the scale of the bound, "
            f"where {slack:.4f} is allowed",
            value,
            slack,
        )
    return None


def _told(what: str, y: Floats, window: Window) -> str:
    """A pair of transformed distances as distances, with what the bound allows."""
    s = max(window.strain, SMALLEST_STRAIN)
    c = 2 * math.exp(s / 2) * window.shift
    d = np.exp(y) - c / math.expm1(s)
    low, high = max(0.0, (float(d[0]) - c) / math.exp(s)), float(d[0]) * math.exp(s) + c
    return (
        f"{what} is {d[0]:.4f} and {d[1]:.4f} Å; for the first, a match allows {low:.4f} to {high:.4f} Å for the second"
    )


def _columns(prepared: Prepared) -> tuple[float, int, int, tuple[float, float]]:
    """The largest difference of sorted columns: (value, species, column, the two numbers)."""
    blocks = prepared.crystals.blocks
    worst: tuple[float, int, int, tuple[float, float]] = (-1.0, 0, 0, (0.0, 0.0))
    for kind in range(blocks.shape[1] - 1):
        parts = [prepared.ordered[blocks[i, kind] : blocks[i, kind + 1]].astype(np.float64) for i in range(2)]
        both = math.lcm(len(parts[0]), len(parts[1]))
        x, y = (np.repeat(p, both // len(p), axis=0) for p in parts)
        apart = np.abs(x - y)
        i, column = np.unravel_index(int(np.argmax(apart)), apart.shape)
        if apart[i, column] > worst[0]:
            worst = (float(apart[i, column]), kind, int(column), (float(x[i, column]), float(y[i, column])))
    return worst


def _rows(prepared: Prepared) -> tuple[float, int, int]:
    """The site whose best partner is worst: (value, 0 for a site of A or 1 of B, its number in the reduced cell)."""
    c = prepared.crystals
    worst = (-1.0, 0, 0)
    for side in range(2):
        for kind in range(c.blocks.shape[1] - 1):
            others = range(*c.blocks[1 - side, kind : kind + 2].tolist())
            for p in range(*c.blocks[side, kind : kind + 2].tolist()):
                best = min(_site_apart(prepared, p, q) for q in others)
                if best > worst[0]:
                    worst = (best, side, int(prepared.order[p] - c.offsets[side]))
    return worst


def _site_apart(prepared: Prepared, p: int, q: int) -> float:
    """How far two sites are from being allowed to pair: the largest difference of their rows."""
    rows, grouped, counts = prepared.crystals.rows, prepared.grouped, prepared.counts
    value = float(np.abs(rows[p] - rows[q]).max())
    if counts.shape[1] == 1:
        return value
    at_p = at_q = 0
    for more_p, more_q in zip(counts[p].tolist(), counts[q].tolist(), strict=True):
        both = min(more_p, more_q)
        if both:
            value = max(value, float(np.abs(grouped[p, at_p : at_p + both] - grouped[q, at_q : at_q + both]).max()))
        if more_p > both:
            value = max(value, float(rows[q, -1] - grouped[p, at_p + both]))
        if more_q > both:
            value = max(value, float(rows[p, -1] - grouped[q, at_q + both]))
        at_p, at_q = at_p + more_p, at_q + more_q
    return value


def _lattice(search: Search, a: Side, b: Side) -> Bound | None:
    """That no lattice of the one, approximate translations included, maps onto one of the other within the strain."""
    c = search.prepared.crystals
    least = math.inf
    for i in range(int(c.variants[0]), int(c.variants[1])):
        for j in range(int(c.variants[1]), int(c.variants[2])):
            if len(a.tokens) * c.orders[j] == len(b.tokens) * c.orders[i]:
                least = min(least, nearest_lattice_strain(c.bases[i], c.bases[j], bool(c.planar[0])))
    limit = search.window.strain
    if least <= limit + 1e-9:
        return None
    if math.isinf(least):
        how = f"none within a strain of {LATTICE_REACH:g}, or none with equal numbers of sites"
    else:
        how = f"the nearest is a strain of {least:.5f} away"
    return "lattice", f"they have no common lattice: {how}; the window ends at {limit:g}", least, limit


def nearest_lattice_strain(first: Floats, second: Floats, planar: bool = False) -> float:
    """The least largest |ln stretch| of a map of one lattice onto the other; infinite beyond LATTICE_REACH.

    first, second (3, 3): reduced bases. Rows of the image are lattice vectors of the second whose length differs from
    that of the row by no more than the reach; all of them are tried.
    """
    up = math.exp(LATTICE_REACH)
    lengths = np.linalg.norm(first, axis=1)
    longest = lengths[:2].max() if planar else lengths.max()
    box = np.floor(longest * up * np.linalg.norm(np.linalg.inv(second), axis=0) + 1e-9).astype(int)
    if planar:
        box[2] = 1  # the third rows of two layers are one length, along the normal
    axes = [np.arange(-n, n + 1) for n in box]
    integers = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    sizes = np.linalg.norm(integers @ second, axis=1)
    fits = (sizes[None] < lengths[:, None] * up) & (sizes[None] > lengths[:, None] / up)
    if planar:
        fits[:2] &= integers[:, 2] == 0
        fits[2] &= (integers[:, :2] == 0).all(axis=1) & (np.abs(integers[:, 2]) == 1)
    rows = [integers[f] for f in fits]
    inverse = np.linalg.inv(first)
    least = math.inf
    for u in rows[0]:
        pairs = np.stack(np.broadcast_arrays(rows[1][:, None], rows[2][None]), axis=2).reshape(-1, 2, 3)
        maps = np.concatenate([np.broadcast_to(u, (len(pairs), 1, 3)), pairs], axis=1)
        maps = maps[np.abs(np.rint(np.linalg.det(maps.astype(np.float64)))) == 1]
        if len(maps):
            stretches = np.linalg.svd(inverse @ (maps @ second), compute_uv=False)
            least = min(least, float(np.abs(np.log(stretches)).max(axis=1).min()))
    return least if least <= LATTICE_REACH else math.inf


def _closest(
    a: Side, b: Side, t: Tolerances, mirror_images: str, strained: bool
) -> tuple[PairMatch | None, float | None, float | None]:
    """The closest match in a window of wider shift, and of wider strain if `strained`; and how far was looked."""
    if max(len(a.tokens), len(b.tokens)) > MOST_SITES:
        return None, None, None
    usual = near_window(t)
    shift = strain = 0.0
    for factor in WIDER:
        shift = max(usual.shift, min(factor * usual.shift, WIDEST_SHIFT))
        strain = max(usual.strain, min(factor * usual.strain, WIDEST_STRAIN)) if strained else usual.strain
        window = Window((*usual.shifts[:2], shift), (*usual.strains[:2], strain))
        found = match_of(a, b, window, mirror_images, t.near_strain)
        if found is not None:
            return found, shift, strain
    return None, shift, strain


def _ordinal(number: int) -> str:
    ending = "th" if number % 100 in (11, 12, 13) else {1: "st", 2: "nd", 3: "rd"}.get(number % 10, "th")
    return f"{number}{ending}"
