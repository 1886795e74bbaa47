"""Random numbers that are the same on every machine and in every version of the libraries."""

from __future__ import annotations

import random
from typing import Any, Protocol

import numpy as np


class Chance(Protocol):
    """What the disguises draw from: this module's Draws, or a numpy Generator (which has these methods too)."""

    def random(self, size: Any = None) -> Any:
        """Uniform in [0, 1)."""

    def integers(self, low: int, high: int) -> Any:
        """Uniform in low to high - 1."""

    def permutation(self, x: int) -> Any:
        """A random order of range(x)."""

    def choice(self, a: Any, size: Any = None) -> Any:
        """One of a, or an array of so many, with repetition."""

    def normal(self, *, size: Any) -> Any:
        """An array whose distribution does not depend on direction, in rows of three."""


class Draws:
    """Draws that rest on `random.Random.random` alone.

    Python's documentation promises its sequence for a seed in all versions; numpy promises none for the methods of a
    Generator. Everything here is made of it by additions, multiplications and comparisons, which IEEE 754 fixes.
    """

    def __init__(self, seed: int) -> None:
        self._source = random.Random(seed)

    def random(self, size: int | tuple[int, ...] | None = None) -> Any:
        """A float in [0, 1), or a float64 array of them."""
        if size is None:
            return self._source.random()
        shape = (size,) if isinstance(size, int) else size
        flat = [self._source.random() for _ in range(int(np.prod(shape)))]
        return np.array(flat, np.float64).reshape(shape)

    def uniform(self, low: float, high: float) -> float:
        """A float between the two."""
        return low + (high - low) * self._source.random()

    def integers(self, low: int, high: int) -> int:
        """An integer from low to high - 1."""
        return low + int((high - low) * self._source.random())

    def permutation(self, x: int) -> Any:
        """range(x) in a random order (Fisher & Yates), as an int64 array."""
        order = list(range(x))
        for i in range(x - 1, 0, -1):
            j = self.integers(0, i + 1)
            order[i], order[j] = order[j], order[i]
        return np.array(order, np.int64)

    def choice(self, a: Any, size: int | None = None) -> Any:
        """One of a sequence, or an array of so many, with repetition."""
        if size is None:
            return a[self.integers(0, len(a))]
        return np.array([a[self.integers(0, len(a))] for _ in range(size)])

    def normal(self, *, size: tuple[int, ...]) -> Any:
        """Rows of three, uniform in the ball of radius 1: as good a direction as normal deviates give."""
        rows: list[list[float]] = []
        while len(rows) < int(np.prod(size)) // 3:
            row = [2 * self._source.random() - 1 for _ in range(3)]
            if 0.01 < row[0] * row[0] + row[1] * row[1] + row[2] * row[2] < 1:
                rows.append(row)
        return np.array(rows, np.float64).reshape(size)
