"""The crystal key: a digest of a canonical crystal on integers that rounding does not reach.

Every number is taken as n = floor(x N + phi), with N = GRID and phi = GRID_OFFSET:
- the metric over (volume / sites)^(2/3), six numbers;
- the cube root (angstrom) of the volume per site, so that its step is of the same relative size as that of the metric;
- fractional positions, modulo N.
Layers are taken in their close frame (lattice/layer.py), whose third row follows the layer alone; the periodicity is
hashed too, so that a layer never has the key of a bulk crystal. Equal keys prove that two crystals are the same up to
about 1e-5; unequal keys prove nothing.
"""

from __future__ import annotations

import hashlib

import numpy as np

from ..lattice.layer import close_layers
from ..lattice.metric import characteristics, metric
from ..model.batch import CrystalBatch, Floats, Ints
from ..tolerances import GRID, GRID_OFFSET

VERSION = b"crystal-key-1"
"""First bytes of what is hashed. Whoever changes what a key is made of changes this."""


def grid_numbers(x: Floats) -> Ints:
    """floor(x N + phi), int64, of an array of any shape."""
    return np.floor(x * GRID + GRID_OFFSET).astype(np.int64)


def crystal_keys(crystals: CrystalBatch) -> list[str]:
    """The keys, 64 hex digits each, of canonical crystals (as `canonicalise` returns them).

    For a crystal in any other basis, origin or order the result means nothing.
    """
    if len(crystals) == 0:
        return []
    crystals = close_layers(crystals)
    counts = np.diff(crystals.offsets)
    size = np.cbrt(crystals.volumes / counts)
    six = characteristics(metric(crystals.cells)) / (size**2)[:, None]
    six[:, 3:] *= 0.5
    head = np.concatenate([grid_numbers(six), grid_numbers(size)[:, None], counts[:, None]], axis=1).astype("<i8")
    places = (grid_numbers(crystals.positions) % GRID).astype("<i4")
    keys = []
    heads, bodies, width = head.tobytes(), places.tobytes(), 8 * head.shape[1]
    codes, offsets = crystals.species, crystals.offsets.tolist()
    periodicity = crystals.periodicity.tobytes()
    # Species as runs of equal code in site order.
    new_run = np.ones(len(codes), bool)
    new_run[1:] = codes[1:] != codes[:-1]
    new_run[crystals.offsets[:-1]] = True
    starts = np.flatnonzero(new_run)
    runs = np.searchsorted(starts, crystals.offsets).tolist()
    run_tokens = [crystals.tokens[c] for c in codes[starts].tolist()]
    run_counts = np.diff(np.append(starts, len(codes))).tolist()
    for i in range(len(crystals)):
        first, last = runs[i], runs[i + 1]
        text = "".join(f"{run_tokens[r]}\t{run_counts[r]}\n" for r in range(first, last))
        digest = hashlib.sha256(VERSION)
        digest.update(periodicity[i : i + 1])
        digest.update(heads[i * width : (i + 1) * width])
        digest.update(text.encode() + b"\0" + bodies[12 * offsets[i] : 12 * offsets[i + 1]])
        keys.append(digest.hexdigest())
    return keys


def species_ranks(crystals: CrystalBatch) -> Ints:
    """Rank (m,) int64 of the species of each site of canonical crystals, from 0 a crystal, the rarest first."""
    codes = crystals.species
    change = np.zeros(len(codes), np.int64)
    change[1:] = codes[1:] != codes[:-1]
    if len(crystals) == 0:
        return change
    starts = crystals.offsets[:-1]
    change[starts] = 0
    total = np.cumsum(change)
    return total - np.repeat(total[starts], np.diff(crystals.offsets))
