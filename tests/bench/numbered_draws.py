"""Random numbers by number, compiled: every stream is made of (seed, purpose, number), and needs none before it.

The mixing steps are those of SplitMix64 (Steele, Lea & Flood, OOPSLA 2014).
"""

from __future__ import annotations

import numpy as np

from lattice_census.kernels.compiled import inner

_GAMMA = np.uint64(0x9E3779B97F4A7C15)
_FIRST, _SECOND = np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB)
_30, _27, _31, _11 = np.uint64(30), np.uint64(27), np.uint64(31), np.uint64(11)

RECORD, COMPOSITION, FORMULA, CRYSTAL, DISGUISE = range(1, 6)
"""Purposes of random numbers."""


@inner
def mix(z):
    z = (z ^ (z >> _30)) * _FIRST
    z = (z ^ (z >> _27)) * _SECOND
    return z ^ (z >> _31)


@inner
def state(seed, purpose, number):
    s = np.empty(1, np.uint64)
    s[0] = mix(mix(np.uint64(seed) * _GAMMA + np.uint64(purpose)) + np.uint64(number) * _GAMMA)
    return s


@inner
def draw(s):
    """The next number in [0, 1)."""
    s[0] = s[0] + _GAMMA
    return float(mix(s[0]) >> _11) * (1.0 / 9007199254740992.0)


@inner
def normal(s):
    return np.sqrt(-2.0 * np.log(1.0 - draw(s))) * np.cos(2 * np.pi * draw(s))
