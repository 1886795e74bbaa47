"""The pairs of one composition that have been verified, and the rule by which more are: each at most once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats, Ints
from .verification import NO_MATCH, Verified


@dataclass(frozen=True, slots=True)
class Limit:
    """What makes two nodes neighbours in a graph: a grade, under one rule for mirror images."""

    grade: int
    """0 for `same`, 1 for `near`."""

    shift: float
    strain: float

    separate: bool
    """Mirror images are two crystals: only a proper match counts."""


class PairStore:
    """Verified pairs (first < second) of n nodes; `together` and `apart` force and forbid pairs whatever was measured.

    known: matches among the nodes `old` (n,), whose other pairs are known to be none but where both are `unsure` (n,).
    """

    def __init__(
        self,
        nodes: int,
        verify: Callable[[Ints], Verified],
        together: Ints,
        apart: Ints,
        known: Verified | None = None,
        old: NDArray[np.bool_] | None = None,
        unsure: NDArray[np.bool_] | None = None,
    ) -> None:
        self.nodes = nodes
        self._verify = verify
        self._parts: list[Verified] = []
        self._grades: dict[int, tuple[int, int]] = {}  # pair -> grade, proper grade
        self.together = self._code(together)
        self.apart = self._code(apart)
        self.computed = 0
        self._old = np.zeros(nodes, bool) if old is None else old
        self._unsure = np.zeros(nodes, bool) if unsure is None else unsure
        if known is not None and len(known):
            self._append(known)

    def _code(self, pairs: Ints) -> Ints:
        pairs = np.asarray(pairs, dtype=np.int64).reshape(-1, 2)
        return np.unique(pairs.min(axis=1) * self.nodes + pairs.max(axis=1))

    def _append(self, found: Verified) -> None:
        codes = (found.pairs[:, 0] * self.nodes + found.pairs[:, 1]).tolist()
        grades = zip(found.grade.tolist(), found.proper_grade.tolist(), strict=True)
        self._grades.update(zip(codes, grades, strict=True))
        matched = found.take(found.grade < NO_MATCH)
        if len(matched):
            self._parts.append(matched)

    def ensure(self, pairs: Ints) -> None:
        """Verify those of the pairs (p, 2), first < second, that have not been."""
        codes = np.unique(pairs[:, 0] * self.nodes + pairs[:, 1])
        codes = codes[~self.has(codes)]
        if len(codes):
            self.computed += len(codes)
            self._append(self._verify(np.stack([codes // self.nodes, codes % self.nodes], axis=1)))

    def has(self, codes: Ints) -> NDArray[np.bool_]:
        """Which pairs, as first * nodes + second, have been verified or are known."""
        done = np.fromiter((c in self._grades for c in codes.tolist()), bool, len(codes))
        first, second = codes // self.nodes, codes % self.nodes
        known = self._old[first] & self._old[second] & ~(self._unsure[first] & self._unsure[second])
        return np.asarray(done | known)

    def neighbours(self, pairs: Ints, limit: Limit, node: int) -> Ints:
        """The other end of those of the verified pairs (p, 2) of `node` that are neighbours at a grade."""
        codes = pairs[:, 0] * self.nodes + pairs[:, 1]
        grade = np.array([self._grades[c][limit.separate] for c in codes.tolist()], dtype=np.int64)
        good = pairs[(grade <= limit.grade) & ~np.isin(codes, self.apart)]
        return np.asarray(good.sum(axis=1) - node, dtype=np.int64)

    def matches(self) -> Verified | None:
        """All verified pairs that match in the window, ascending by pair."""
        if not self._parts:
            return None
        if len(self._parts) > 1:
            self._parts = [
                Verified(
                    **{f.name: np.concatenate([getattr(p, f.name) for p in self._parts]) for f in fields(Verified)}
                )
            ]
        found = self._parts[0]
        return found.take(np.argsort(found.pairs[:, 0] * self.nodes + found.pairs[:, 1], kind="stable"))

    def edges(self, limit: Limit) -> tuple[Ints, Floats, Floats, Floats]:
        """Pairs (e, 2) that are neighbours at a grade, with shift, strain and t = max(shift / limit, strain / limit).

        Pairs pinned together that do not match have shift and strain NaN and t = infinity: they hold a group together,
        and nothing is said of their distance. A pair pinned apart is none.
        """
        found = self.matches()
        if found is None:
            pairs, shift, strain = np.zeros((0, 2), np.int64), np.zeros(0), np.zeros(0)
        else:
            if limit.separate:
                grade, shift, strain = found.proper_grade, found.proper_shift, found.proper_strain
            else:
                grade, shift, strain = found.grade, found.largest_shift, found.strain
            keep = grade <= limit.grade
            pairs, shift, strain = found.pairs[keep], shift[keep], strain[keep]
        codes = pairs[:, 0] * self.nodes + pairs[:, 1]
        keep = ~np.isin(codes, self.apart)
        added = self.together[~np.isin(self.together, codes)]
        pairs = np.concatenate([pairs[keep], np.stack([added // self.nodes, added % self.nodes], axis=1)])
        unmeasured = np.full(len(added), np.nan)
        shift, strain = np.concatenate([shift[keep], unmeasured]), np.concatenate([strain[keep], unmeasured])
        t = np.fmax(shift / limit.shift, strain / limit.strain)
        return pairs, shift, strain, np.where(np.isnan(t), np.inf, t)
