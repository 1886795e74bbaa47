"""Invented crystals by number, compiled: what crystal i is depends on the seed and i alone (numbered_draws.py)."""

from __future__ import annotations

import numpy as np

from lattice_census.kernels.compiled import inner

from .numbered_draws import COMPOSITION, CRYSTAL, FORMULA, RECORD, draw, normal, state

_WORDS = (
    "H Li Be B C N O F Na Mg Al Si P S Cl K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Rb Sr Y Zr Nb Mo Ru Rh Pd "
    "Ag Cd In Sn Sb Te I Cs Ba La Ce Pr Nd Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Th U"
)
ELEMENTS = tuple(_WORDS.split())
"""What a species code stands for."""

MANY = len(ELEMENTS)

MOST_SITES = 60
"""Sites of a primitive cell."""

APART = 1.4
"""Least distance of two sites, angstrom."""


@inner
def crystal_number(seed, share, record):
    """The crystal that a record shows: the number of the first record that shows it.

    A record is a copy with probability `share`, of a record drawn from all before it; so crystals that have many copies
    get more.
    """
    while record > 0:
        s = state(seed, RECORD, record)
        if draw(s) >= share:
            return record
        record = int(draw(s) * record)
    return 0


@inner
def formula_number(seed, common, crystal):
    """The number of a crystal's formula: -1 to -4 for the common ones.

    With probability `common` it is one of the common ones; else a new one or that of an earlier crystal, evenly (Simon,
    Biometrika 42, 425, 1955): most formulas have one crystal or two, some have many.
    """
    while crystal > 0:
        s = state(seed, COMPOSITION, crystal)
        if draw(s) < common:
            return -1 - int(4 * draw(s))
        if draw(s) < 0.5:
            return crystal
        crystal = int(draw(s) * crystal)
    return 0 if common < 1.0 else -1


@inner
def _formula(seed, number, elements, counts):
    """Fill elements (5,) and counts (5,) of a formula; returns how many."""
    s = state(seed, FORMULA, number + 4)
    u = draw(s)
    kinds = 1 if u < 0.02 else 2 if u < 0.22 else 3 if u < 0.72 else 4 if u < 0.94 else 5
    if number < 0:
        kinds = 2
    for k in range(kinds):
        while True:
            e = int(draw(s) * MANY)
            again = False
            for other in range(k):
                again |= elements[other] == e
            if not again:
                break
        elements[k] = e
        u = draw(s)
        counts[k] = 1 if u < 0.5 else 2 if u < 0.75 else 3 if u < 0.9 else 4
    return kinds


@inner
def _cell(s, volume, sites):
    """A reduced or nearly reduced cell of a lattice of any family; with few sites always a triclinic one."""
    a, b, c = np.exp(0.3 * (2 * draw(s) - 1)), np.exp(0.3 * (2 * draw(s) - 1)), np.exp(0.3 * (2 * draw(s) - 1))
    x, y, z = 0.3 * (2 * draw(s) - 1), 0.3 * (2 * draw(s) - 1), 0.3 * (2 * draw(s) - 1)  # cosines
    family = draw(s)
    if sites >= 5:
        if 0.35 <= family < 0.6:  # monoclinic
            x, z = 0.0, 0.0
        elif family >= 0.6:
            x, y, z = 0.0, 0.0, 0.0
            if family >= 0.75:  # tetragonal
                b = a
            if 0.83 <= family < 0.9:  # hexagonal
                z = -0.5
            if family >= 0.9:  # cubic: primitive, face-centred, body-centred
                c = a
                x = y = z = 0.0 if family < 0.94 else 0.5 if family < 0.97 else -1.0 / 3
    out = np.zeros((3, 3))
    out[0, 0] = a
    out[1, 0], out[1, 1] = b * z, b * np.sqrt(1 - z * z)
    out[2, 0] = c * y
    out[2, 1] = c * (x - y * z) / np.sqrt(1 - z * z)
    out[2, 2] = np.sqrt(c * c - out[2, 0] ** 2 - out[2, 1] ** 2)
    scale = (volume / (out[0, 0] * out[1, 1] * out[2, 2])) ** (1.0 / 3)
    for i in range(3):
        for j in range(3):
            out[i, j] *= scale
    return out


@inner
def _too_close(cell, positions, placed, x):
    """Whether x lies closer than APART to one of the sites placed, or to an image of one."""
    for j in range(placed):
        d0, d1, d2 = x[0] - positions[j, 0], x[1] - positions[j, 1], x[2] - positions[j, 2]
        d0, d1, d2 = d0 - np.rint(d0), d1 - np.rint(d1), d2 - np.rint(d2)
        for i0 in range(-1, 2):
            for i1 in range(-1, 2):
                for i2 in range(-1, 2):
                    f0, f1, f2 = d0 + i0, d1 + i1, d2 + i2
                    u = f0 * cell[0, 0] + f1 * cell[1, 0] + f2 * cell[2, 0]
                    v = f1 * cell[1, 1] + f2 * cell[2, 1]
                    w = f2 * cell[2, 2]
                    if u * u + v * v + w * w < APART * APART:
                        return True
    return False


@inner
def make_crystal(seed, number, formula):
    """(cell (3, 3), positions (n, 3), species codes (n,)) of a crystal: random sites, none closer than APART."""
    elements, counts = np.empty(5, np.int64), np.empty(5, np.int64)
    kinds = _formula(seed, formula, elements, counts)
    unit = 0
    for k in range(kinds):
        unit += counts[k]
    s = state(seed, CRYSTAL, number)
    wanted = np.exp(np.log(8.0) + 0.75 * normal(s))
    if formula < 0:
        wanted = max(wanted, 6.0 + unit)
    units = min(max(int(np.rint(wanted / unit)), 1), MOST_SITES // unit)
    n = units * unit
    cell = _cell(s, n * (12.0 + 6.0 * draw(s)), n)
    positions, species = np.empty((n, 3)), np.empty(n, np.int32)
    place = 0
    for k in range(kinds):
        for i in range(place, place + counts[k] * units):
            species[i] = elements[k]
        place += counts[k] * units
    x = np.empty(3)
    placed = tries = 0
    while placed < n:
        x[0], x[1], x[2] = draw(s), draw(s), draw(s)
        tries += 1
        if _too_close(cell, positions, placed, x):
            if tries > 400 * n:  # no room left: begin again in a larger cell
                for i in range(3):
                    for j in range(3):
                        cell[i, j] *= 1.03
                placed = tries = 0
            continue
        positions[placed, 0], positions[placed, 1], positions[placed, 2] = x[0], x[1], x[2]
        placed += 1
    return cell, positions, species
