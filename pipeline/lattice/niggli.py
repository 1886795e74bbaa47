"""What a Niggli cell is, as a predicate that shares no code with the reduction.

The conditions are those of the International Tables for Crystallography A, section on reduced bases (main conditions,
then the special ones that apply where a main condition holds with equality), read with a tolerance as
Grosse-Kunstleve, Sauter & Adams (2004) do: every comparison allows `epsilon`, every equality means "within epsilon".
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..model.batch import Floats
from .metric import at_unit_volume, characteristics


def is_niggli_reduced(metrics: Floats, epsilon: float | Floats) -> NDArray[np.bool_]:
    """Which metrics (..., 3, 3), in square angstrom, belong to Niggli-reduced cells.

    epsilon, one for all or (...), is the tolerance at cell volume 1.
    """
    g = characteristics(at_unit_volume(metrics))
    a, b, c, xi, eta, zeta = (g[..., k] for k in range(6))

    def same(x: Floats, y: Floats) -> NDArray[np.bool_]:
        return np.asarray(np.abs(x - y) <= epsilon)

    def at_most(x: Floats, y: Floats) -> NDArray[np.bool_]:
        return np.asarray(x <= y + epsilon)

    smallest, largest = g[..., 3:].min(axis=-1), g[..., 3:].max(axis=-1)
    type_one = np.asarray(smallest > epsilon)
    type_two = np.asarray(largest <= epsilon)
    zero = np.zeros_like(a)

    # Main conditions.
    ok = at_most(a, b) & at_most(b, c)
    ok &= at_most(np.abs(xi), b) & at_most(np.abs(eta), a) & at_most(np.abs(zeta), a)
    ok &= type_one | (type_two & at_most(zero, xi + eta + zeta + a + b))
    # Special conditions of both types.
    ok &= ~same(a, b) | at_most(np.abs(xi), np.abs(eta))
    ok &= ~same(b, c) | at_most(np.abs(eta), np.abs(zeta))
    # Special conditions of type I.
    first = ~same(xi, b) | at_most(zeta, 2 * eta)
    first &= ~same(eta, a) | at_most(zeta, 2 * xi)
    first &= ~same(zeta, a) | at_most(eta, 2 * xi)
    # Special conditions of type II.
    second = ~same(-xi, b) | same(zeta, zero)
    second &= ~same(-eta, a) | same(zeta, zero)
    second &= ~same(-zeta, a) | same(eta, zero)
    second &= ~same(xi + eta + zeta + a + b, zero) | at_most(2 * (a + eta) + zeta, zero)
    return np.asarray(ok & np.where(type_one, first, second))
