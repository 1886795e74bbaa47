"""Pairing the sites of two crystals in one common cell, for a given lattice map and origin.

Two ways. Where four times the shift looked for is below the least distance of equal species, at most one site can lie
within twice that shift of a given point, so the nearest one is the only possible partner. Otherwise the assignment with
the smallest largest shift is taken (bottleneck assignment: edges enter in the order of their length, augmenting paths
after Kuhn 1955, until every site has a partner).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from .compiled import inner
from .hermite import coset_index
from .lattice_maps import inverse3

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@inner
def length2(g: Floats, x: float, y: float, z: float) -> float:
    """Squared length of the fractional vector (x, y, z) in the metric g (3, 3)."""
    return float(
        x * x * g[0, 0]
        + y * y * g[1, 1]
        + z * z * g[2, 2]
        + 2.0 * (x * y * g[0, 1] + x * z * g[0, 2] + y * z * g[1, 2])
    )


@inner
def nearest_pairing(
    targets: Floats,
    target_blocks: Ints,
    positions: Floats,
    blocks: Ints,
    g: Floats,
    s0: float,
    s1: float,
    s2: float,
    limit2: float,
    partner: Ints,
    images: Ints,
    d: Floats,
) -> bool:
    """For each target + s the site of its species within sqrt(limit2), modulo the lattice of the second crystal.

    targets (t, 3), positions (n, 3): fractions of the second crystal's cell, sorted by species; target_blocks and
    blocks (kinds + 1,): where the species begin; g: metric (3, 3), angstrom^2. Fills partner (t,), images (t, 3) int64
    and d (t, 3) with d = positions[partner] + images - targets - s. False as soon as a target has no site near it.

    Exact where at most one site lies in each ball and sqrt(limit2) is below half the least height of the cell.
    """
    for s in range(blocks.shape[0] - 1):
        for t in range(target_blocks[s], target_blocks[s + 1]):
            t0, t1, t2 = targets[t, 0] + s0, targets[t, 1] + s1, targets[t, 2] + s2
            found = False
            for q in range(blocks[s], blocks[s + 1]):
                x, y, z = positions[q, 0] - t0, positions[q, 1] - t1, positions[q, 2] - t2
                n0, n1, n2 = math.floor(x + 0.5), math.floor(y + 0.5), math.floor(z + 0.5)
                x, y, z = x - n0, y - n1, z - n2
                if length2(g, x, y, z) <= limit2:
                    partner[t] = q
                    images[t, 0], images[t, 1], images[t, 2] = -n0, -n1, -n2
                    d[t, 0], d[t, 1], d[t, 2] = x, y, z
                    found = True
                    break
            if not found:
                return False
    return True


@inner
def _augment(
    t: int,
    starts: Ints,
    ends: Ints,
    edge_node: Ints,
    edge_length: Floats,
    limit: float,
    mate: Ints,
    seen: Ints,
    mark: int,
) -> bool:
    """Kuhn's augmenting path from target t over edges up to `limit`, without recursion; mate (nodes,): target or -1."""
    stack = np.empty(mate.shape[0] + 2, np.int64)
    cursor = np.empty(mate.shape[0] + 2, np.int64)
    via = np.empty(mate.shape[0] + 2, np.int64)
    depth = 0
    stack[0] = t
    cursor[0] = starts[t]
    while depth >= 0:
        here = stack[depth]
        if cursor[depth] == ends[here]:
            depth -= 1
            continue
        e = cursor[depth]
        cursor[depth] += 1
        node = edge_node[e]
        if edge_length[e] > limit or seen[node] == mark:
            continue
        seen[node] = mark
        via[depth] = node
        if mate[node] < 0:
            for level in range(depth, -1, -1):
                mate[via[level]] = stack[level]
            return True
        depth += 1
        stack[depth] = mate[node]
        cursor[depth] = starts[mate[node]]
    return False


@inner
def _wider(node: Ints, length: Floats, image: Ints) -> tuple[Ints, Floats, Ints]:
    """Copies of the columns of edges with room for twice as many."""
    n = node.shape[0]
    more_node, more_length, more_image = np.empty(2 * n, np.int64), np.empty(2 * n), np.empty((2 * n, 3), np.int64)
    for e in range(n):
        more_node[e], more_length[e] = node[e], length[e]
        for i in range(3):
            more_image[e, i] = image[e, i]
    return more_node, more_length, more_image


@inner
def _sorted(values: Floats, count: int) -> Floats:
    """The first `count` values in ascending order (Shell 1959)."""
    out = np.empty(count)
    for i in range(count):
        out[i] = values[i]
    gap = count // 2
    while gap > 0:
        for i in range(gap, count):
            v = out[i]
            j = i
            while j >= gap and out[j - gap] > v:
                out[j] = out[j - gap]
                j -= gap
            out[j] = v
        gap //= 2
    return out


@inner
def _complete(starts: Ints, ends: Ints, edge_node: Ints, edge_length: Floats, limit: float, mate: Ints) -> bool:
    """Whether edges up to `limit` allow a complete pairing; fills mate."""
    seen = np.empty(mate.shape[0], np.int64)
    for node in range(mate.shape[0]):
        mate[node] = -1
        seen[node] = -1
    for t in range(starts.shape[0]):  # noqa: SIM110 - compiled
        if not _augment(t, starts, ends, edge_node, edge_length, limit, mate, seen, t):
            return False
    return True


@inner
def bottleneck_pairing(
    targets: Floats,
    target_blocks: Ints,
    positions: Floats,
    blocks: Ints,
    g: Floats,
    s0: float,
    s1: float,
    s2: float,
    limit2: float,
    common: Ints,
    partner: Ints,
    images: Ints,
    d: Floats,
) -> bool:
    """The one-to-one pairing with the smallest largest |d|, among those with every |d| <= sqrt(limit2).

    As nearest_pairing, without its conditions. common: Hermite matrix of the common lattice in the lattice of the
    second crystal, modulo which the pairing is one to one. Of assignments with the same largest shift the one that
    comes first in the order of edges (length, target, site, image) is built: the same input gives the same pairing.
    """
    index = common[0, 0] * common[1, 1] * common[2, 2]
    inverse = inverse3(g)
    reach = np.empty(3)
    for i in range(3):
        reach[i] = math.sqrt(limit2 * inverse[i, i]) + 1e-12
    count = targets.shape[0]
    starts = np.zeros(count, np.int64)
    ends = np.zeros(count, np.int64)
    capacity = 16 * count + 16
    edge_node = np.empty(capacity, np.int64)
    edge_length = np.empty(capacity)
    edge_image = np.empty((capacity, 3), np.int64)
    used = 0
    for s in range(blocks.shape[0] - 1):
        for t in range(target_blocks[s], target_blocks[s + 1]):
            starts[t] = used
            for q in range(blocks[s], blocks[s + 1]):
                x = positions[q, 0] - targets[t, 0] - s0
                y = positions[q, 1] - targets[t, 1] - s1
                z = positions[q, 2] - targets[t, 2] - s2
                for n0 in range(math.ceil(-reach[0] - x), math.floor(reach[0] - x) + 1):
                    for n1 in range(math.ceil(-reach[1] - y), math.floor(reach[1] - y) + 1):
                        for n2 in range(math.ceil(-reach[2] - z), math.floor(reach[2] - z) + 1):
                            r = length2(g, x + n0, y + n1, z + n2)
                            if r > limit2:
                                continue
                            if used == capacity:
                                edge_node, edge_length, edge_image = _wider(edge_node, edge_length, edge_image)
                                capacity *= 2
                            edge_node[used] = q * index + coset_index(common, n0, n1, n2)
                            edge_length[used] = r
                            edge_image[used, 0], edge_image[used, 1], edge_image[used, 2] = n0, n1, n2
                            used += 1
            ends[t] = used
            if used == starts[t]:
                return False
    steps = _sorted(edge_length, used)
    nodes = positions.shape[0] * index
    mate = np.empty(nodes, np.int64)
    low, high = 0, steps.shape[0] - 1
    while low < high:  # the least length that allows a complete pairing
        middle = (low + high) // 2
        if _complete(starts, ends, edge_node, edge_length, steps[middle], mate):
            high = middle
        else:
            low = middle + 1
    if not _complete(starts, ends, edge_node, edge_length, steps[low], mate):
        return False
    for node in range(nodes):
        t = mate[node]
        if t < 0:
            continue
        best = -1
        for e in range(starts[t], ends[t]):
            if edge_node[e] == node and (best < 0 or edge_length[e] < edge_length[best]):
                best = e
        q = node // index
        partner[t] = q
        for i in range(3):
            images[t, i] = edge_image[best, i]
        d[t, 0] = positions[q, 0] + images[t, 0] - targets[t, 0] - s0
        d[t, 1] = positions[q, 1] + images[t, 1] - targets[t, 1] - s1
        d[t, 2] = positions[q, 2] + images[t, 2] - targets[t, 2] - s2
    return True
