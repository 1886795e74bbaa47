"""Verification: whether two crystals match, with the measures and the witness of the recorded match.

A pair is always computed from the crystal whose content comes first (preparation.py) and turned round where it was
asked for the other way, so that the measures are equal whichever record comes first.

Which match is recorded. Among all matches in the window, first those of the strictest grade reached count (`same`
before `near` before the rest: a grade means that one match keeps both limits, and a noisy pseudo-cubic crystal must
not lose its grade to another setting of its axes with a slightly smaller shift and a larger strain); among them the
smallest largest shift, rounded to 1e-9; then proper before improper, smaller strain, and the smallest P, Q and shift.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from ..kernels.match import match_pairs
from ..kernels.match_columns import Matches
from ..model.batch import CrystalBatch, Floats, Ints
from ..tolerances import Tolerances
from .preparation import Prepared, prepare
from .window import Window, near_window

NO_MATCH = 3
"""Value of a grade column where there is no match in the window."""


@dataclass(frozen=True, slots=True)
class Verified:
    """Recorded matches of p pairs as columns, first crystal (A) to second (B). Rows without a match have grade 3 and
    NaN."""

    pairs: Ints
    """(p, 2): rows of the batch, A and B."""

    grade: Ints
    """(p,): 0 within the limits of `same`, 1 of `near`, 2 within the window, 3 no match."""

    strain: Floats
    """(p,): largest |ln| of the principal stretches; of layers, of the two in the plane."""

    shape_strain: Floats
    """(p,): the same after the mean of the three logarithms is taken off."""

    volume_ratio: Floats
    """(p,): volume per site as the crystals came (layers: area per site), larger over smaller, at least 1."""

    larger: Ints
    """(p,): which of the pair has the larger volume per site: 0 for A, 1 for B, -1 where they are equal to rounding."""

    largest_shift: Floats
    """(p,): over paired sites, mean removed, in the mean metric; angstrom (isotypic: units of (V/site)^(1/3))."""

    rms_shift: Floats
    """(p,): likewise, root mean square."""

    improper: NDArray[np.bool_]
    """(p,): the recorded match turns A into the mirror image of B."""

    mirrored: NDArray[np.bool_]
    """(p,): only an improper match reaches `near` (or, where none does, the window)."""

    proper_grade: Ints
    """(p,): grade of the best proper match, as `grade`. What counts where mirror images are kept apart."""

    proper_strain: Floats
    """(p,): strain of the best proper match."""

    proper_shift: Floats
    """(p,): largest shift of the best proper match."""

    p_matrix: Ints
    """(p, 3, 3): P; P @ cell_A is A's basis of the common cell."""

    q_matrix: Ints
    """(p, 3, 3): Q; Q @ cell_B is B's basis of the common cell."""

    shift: Floats
    """(p, 3): origin shift in fractions of the common cell (witness.py has the equations)."""

    def __len__(self) -> int:
        return len(self.pairs)

    def take(self, rows: Ints | NDArray[np.bool_]) -> Verified:
        """The rows `rows` of every column."""
        return Verified(**{f.name: getattr(self, f.name)[rows] for f in fields(self)})


def verify(prepared: Prepared, pairs: Ints, window: Window, mirror_images: str = "merge") -> Verified:
    """Verify pairs (p, 2) of rows of a prepared batch.

    mirror_images: `merge` records the best match of either hand; `separate` the best proper one where there is one.
    """
    if mirror_images not in ("merge", "separate"):
        raise ValueError(f"mirror_images is merge or separate, not {mirror_images!r}")
    pairs = np.asarray(pairs, dtype=np.int64).reshape(-1, 2)
    turned = prepared.rank[pairs[:, 0]] > prepared.rank[pairs[:, 1]]
    ordered = np.where(turned[:, None], pairs[:, ::-1], pairs)
    found = match_pairs(prepared.crystals, np.ascontiguousarray(ordered), window.limits())
    return _columns(prepared, pairs, ordered, turned, found, mirror_images)


def _log_stretches(prepared: Prepared, ordered: Ints, found: Matches, hand: Ints) -> Floats:
    """(p, 3): logarithms of the principal stretches of the matches of the chosen hands; NaN where there is none.

    A layer has two, in the plane: the third, which is 0, is given as their mean, so that the mean of all is theirs.
    """
    index = np.arange(len(ordered))
    rows = np.flatnonzero(found.grade[index, hand] < NO_MATCH)
    cells = prepared.crystals.cells
    first = found.p[rows, hand[rows]] @ cells[ordered[rows, 0]]
    second = found.q[rows, hand[rows]] @ cells[ordered[rows, 1]]
    out = np.full((len(ordered), 3), np.nan)
    logs = np.log(np.linalg.svd(np.linalg.solve(first, second), compute_uv=False))
    planar = np.flatnonzero(prepared.crystals.planar[ordered[rows, 0]])
    along = np.abs(logs[planar]).argmin(axis=1)
    logs[planar, along] = (logs[planar].sum(axis=1) - logs[planar, along]) / 2.0
    out[rows] = logs
    return out


def _columns(
    prepared: Prepared,
    pairs: Ints,
    ordered: Ints,
    turned: NDArray[np.bool_],
    found: Matches,
    mirror_images: str,
) -> Verified:
    proper, improper = found.grade[:, 0], found.grade[:, 1]
    hand = (improper < NO_MATCH).astype(np.int64)  # given only where it beats the proper one
    if mirror_images == "separate":
        hand[proper < NO_MATCH] = 0
    index = np.arange(len(pairs))
    grade = found.grade[index, hand]
    best = np.minimum(proper, improper)
    mirrored = (improper < NO_MATCH) & np.where(best <= 1, proper > 1, proper == NO_MATCH)
    measures = found.measures[index, hand]
    logs = _log_stretches(prepared, ordered, found, hand)
    proper_logs = _log_stretches(prepared, ordered, found, np.zeros_like(hand))
    p, q, shift = found.p[index, hand], found.q[index, hand], found.shift[index, hand]
    t = turned[:, None, None]
    back = -shift
    back -= np.floor(back + 5e-10)
    per_site = prepared.given_volumes
    difference = per_site[pairs[:, 1]] - per_site[pairs[:, 0]]
    return Verified(
        pairs=pairs,
        grade=grade,
        strain=np.abs(logs).max(axis=1, initial=0.0),
        shape_strain=np.abs(logs - logs.mean(axis=1, keepdims=True)).max(axis=1, initial=0.0),
        volume_ratio=np.exp(np.abs(difference)),
        larger=np.where(np.abs(difference) < 1e-12, -1, (difference > 0).astype(np.int64)),
        largest_shift=measures[:, 0],
        rms_shift=measures[:, 1],
        improper=(hand == 1) & (grade < NO_MATCH),
        mirrored=mirrored,
        proper_grade=proper,
        proper_strain=np.abs(proper_logs).max(axis=1, initial=0.0),
        proper_shift=found.measures[:, 0, 0],
        p_matrix=np.where(t, q, p),
        q_matrix=np.where(t, p, q),
        shift=np.where(turned[:, None], back, shift),
    )


def match(
    batch: CrystalBatch, tolerances: Tolerances, mirror_images: str = "merge", window: Window | None = None
) -> Verified:
    """The recorded match of the two crystals of a batch of two (exact primitive crystals): one row."""
    chosen = window or near_window(tolerances)
    return verify(prepare(batch, chosen), np.array([[0, 1]]), chosen, mirror_images)
