"""Invented crystals and their disguises by number, compiled: what record i is depends on the seed and i alone.

Every number is drawn from a state made of (seed, purpose, number) by the mixing steps of SplitMix64 (Steele, Lea &
Flood, OOPSLA 2014), so that any record can be made without those before it, in any order and in any process.
"""

from __future__ import annotations

import itertools

import numpy as np

from lattice_census.kernels.compiled import inner

_WORDS = (
    "H Li Be B C N O F Na Mg Al Si P S Cl K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Rb Sr Y Zr Nb Mo Ru Rh Pd "
    "Ag Cd In Sn Sb Te I Cs Ba La Ce Pr Nd Sm Eu Gd Tb Dy Ho Er Tm Yb Lu Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Th U"
)
ELEMENTS = tuple(_WORDS.split())
"""What a species code stands for."""

MANY = len(ELEMENTS)

MOST_SITES = 60
"""Sites of a primitive cell."""

MOST_GIVEN = 120
"""Sites of a given cell: larger supercells are not made."""

APART = 1.4
"""Least distance of two sites, angstrom."""

_GAMMA = np.uint64(0x9E3779B97F4A7C15)
_FIRST, _SECOND = np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB)
_30, _27, _31, _11 = np.uint64(30), np.uint64(27), np.uint64(31), np.uint64(11)

RECORD, COMPOSITION, FORMULA, CRYSTAL, DISGUISE = range(1, 6)
"""Purposes of random numbers."""


@inner
def _mix(z):
    z = (z ^ (z >> _30)) * _FIRST
    z = (z ^ (z >> _27)) * _SECOND
    return z ^ (z >> _31)


@inner
def _state(seed, purpose, number):
    s = np.empty(1, np.uint64)
    s[0] = _mix(_mix(np.uint64(seed) * _GAMMA + np.uint64(purpose)) + np.uint64(number) * _GAMMA)
    return s


@inner
def _draw(s):
    """The next number in [0, 1)."""
    s[0] = s[0] + _GAMMA
    return float(_mix(s[0]) >> _11) * (1.0 / 9007199254740992.0)


@inner
def crystal_number(seed, share, record):
    """The crystal that a record shows: the number of the first record that shows it.

    A record is a copy with probability `share`, of a record drawn from all before it; so crystals that have many copies
    get more.
    """
    while record > 0:
        s = _state(seed, RECORD, record)
        if _draw(s) >= share:
            return record
        record = int(_draw(s) * record)
    return 0


@inner
def formula_number(seed, common, crystal):
    """The number of a crystal's formula: -1 to -4 for the common ones.

    With probability `common` it is one of the common ones; else a new one or that of an earlier crystal, evenly (Simon,
    Biometrika 42, 425, 1955): most formulas have one crystal or two, some have many.
    """
    while crystal > 0:
        s = _state(seed, COMPOSITION, crystal)
        if _draw(s) < common:
            return -1 - int(4 * _draw(s))
        if _draw(s) < 0.5:
            return crystal
        crystal = int(_draw(s) * crystal)
    return 0 if common < 1.0 else -1


@inner
def _formula(seed, number, elements, counts):
    """Fill elements (5,) and counts (5,) of a formula; returns how many."""
    s = _state(seed, FORMULA, number + 4)
    u = _draw(s)
    kinds = 1 if u < 0.02 else 2 if u < 0.22 else 3 if u < 0.72 else 4 if u < 0.94 else 5
    if number < 0:
        kinds = 2
    for k in range(kinds):
        while True:
            e = int(_draw(s) * MANY)
            again = False
            for other in range(k):
                again |= elements[other] == e
            if not again:
                break
        elements[k] = e
        u = _draw(s)
        counts[k] = 1 if u < 0.5 else 2 if u < 0.75 else 3 if u < 0.9 else 4
    return kinds


@inner
def _normal(s):
    return np.sqrt(-2.0 * np.log(1.0 - _draw(s))) * np.cos(2 * np.pi * _draw(s))


@inner
def _cell(s, volume, sites):
    """A reduced or nearly reduced cell of a lattice of any family; with few sites always a triclinic one."""
    a, b, c = np.exp(0.3 * (2 * _draw(s) - 1)), np.exp(0.3 * (2 * _draw(s) - 1)), np.exp(0.3 * (2 * _draw(s) - 1))
    x, y, z = 0.3 * (2 * _draw(s) - 1), 0.3 * (2 * _draw(s) - 1), 0.3 * (2 * _draw(s) - 1)  # cosines
    family = _draw(s)
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
    s = _state(seed, CRYSTAL, number)
    wanted = np.exp(np.log(8.0) + 0.75 * _normal(s))
    if formula < 0:
        wanted = max(wanted, 6.0 + unit)
    units = min(max(int(np.rint(wanted / unit)), 1), MOST_SITES // unit)
    n = units * unit
    cell = _cell(s, n * (12.0 + 6.0 * _draw(s)), n)
    positions, species = np.empty((n, 3)), np.empty(n, np.int32)
    place = 0
    for k in range(kinds):
        for i in range(place, place + counts[k] * units):
            species[i] = elements[k]
        place += counts[k] * units
    x = np.empty(3)
    placed = tries = 0
    while placed < n:
        x[0], x[1], x[2] = _draw(s), _draw(s), _draw(s)
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


def _unimodular() -> np.ndarray:
    """Integer matrices of determinant 1 with entries of at most 2: steps and turns from the unit matrix."""
    rng = np.random.default_rng(20)
    out = []
    while len(out) < 64:
        m = np.eye(3, dtype=np.int64)[rng.permutation(3)] * rng.choice([-1, 1], 3)
        for _ in range(rng.integers(1, 6)):
            i, j = rng.permutation(3)[:2]
            m[i] += rng.choice([-1, 1]) * m[j]
        if abs(m).max() <= 2 and round(np.linalg.det(m)) == 1:
            out.append(m)
    return np.array(out)


def _sublattices(index: int) -> np.ndarray:
    """All row Hermite normal forms of a determinant."""
    out = []
    for a, b in itertools.product(range(1, index + 1), repeat=2):
        if index % (a * b) == 0:
            c = index // (a * b)
            out += [[[a, p, q], [0, b, r], [0, 0, c]] for p in range(b) for q in range(c) for r in range(c)]
    return np.array(out, np.int64)


UNIMODULAR = _unimodular().astype(np.float64)
SUBLATTICES = np.concatenate([_sublattices(i) for i in range(1, 5)]).astype(np.float64)
STARTS = np.cumsum([0] + [len(_sublattices(i)) for i in range(1, 5)])


@inner
def _product(a, b):
    """a (3, 3) times b (3, 3)."""
    out = np.zeros((3, 3))
    for i in range(3):
        for j in range(3):
            for k in range(3):
                out[i, j] += a[i, k] * b[k, j]
    return out


@inner
def _determinant(m):
    return (
        m[0, 0] * (m[1, 1] * m[2, 2] - m[1, 2] * m[2, 1])
        - m[0, 1] * (m[1, 0] * m[2, 2] - m[1, 2] * m[2, 0])
        + m[0, 2] * (m[1, 0] * m[2, 1] - m[1, 1] * m[2, 0])
    )


@inner
def _inverse(m):
    out = np.empty((3, 3))
    scale = 1.0 / _determinant(m)
    for i in range(3):
        for j in range(3):
            a, b, c, d = (j + 1) % 3, (j + 2) % 3, (i + 1) % 3, (i + 2) % 3
            out[i, j] = (m[a, c] * m[b, d] - m[a, d] * m[b, c]) * scale
    return out


@inner
def _rotation(s):
    """A random rotation, from a random unit quaternion (Shoemake, Graphics Gems III, 1992)."""
    u, v, w = _draw(s), 2 * np.pi * _draw(s), 2 * np.pi * _draw(s)
    x, y = np.sqrt(1 - u) * np.sin(v), np.sqrt(1 - u) * np.cos(v)
    z, t = np.sqrt(u) * np.sin(w), np.sqrt(u) * np.cos(w)
    r = np.empty((3, 3))
    r[0, 0], r[0, 1], r[0, 2] = 1 - 2 * (y * y + z * z), 2 * (x * y - z * t), 2 * (x * z + y * t)
    r[1, 0], r[1, 1], r[1, 2] = 2 * (x * y + z * t), 1 - 2 * (x * x + z * z), 2 * (y * z - x * t)
    r[2, 0], r[2, 1], r[2, 2] = 2 * (x * z - y * t), 2 * (y * z + x * t), 1 - 2 * (x * x + y * y)
    return r


@inner
def _basis(s, cell, index, unimodular, sublattices, starts):
    """(matrix, Hermite form) of a random basis with `index` times the volume: not flatter than V/(abc) = 0.1 if that is
    found."""
    for _ in range(20):
        h = sublattices[starts[index - 1] + int(_draw(s) * (starts[index] - starts[index - 1]))]
        m = _product(unimodular[int(_draw(s) * len(unimodular))], h)
        new = _product(m, cell)
        box = 1.0
        for i in range(3):
            box *= np.sqrt(new[i, 0] ** 2 + new[i, 1] ** 2 + new[i, 2] ** 2)
        if _determinant(new) > 0.1 * box:
            break
    return m, h


@inner
def _shake(s, noise, positions, cell):
    """Move every site, and return the strained cell."""
    inverse = _inverse(cell)
    for i in range(len(positions)):
        while True:
            a, b, c = 2 * _draw(s) - 1, 2 * _draw(s) - 1, 2 * _draw(s) - 1
            if a * a + b * b + c * c <= 1:
                break
        for k in range(3):
            positions[i, k] += noise * (a * inverse[0, k] + b * inverse[1, k] + c * inverse[2, k])
    stretch, strain = np.zeros((3, 3)), 0.1 * noise
    for i in range(3):
        # Gershgorin: an eigenvalue is no larger than a row's sum of sizes, 0.95 of the limit.
        stretch[i, i] = 1 + 0.57 * strain * (2 * _draw(s) - 1)
        for j in range(i):
            stretch[i, j] = stretch[j, i] = 0.19 * strain * (2 * _draw(s) - 1)
    return _product(cell, stretch)


@inner
def disguise(seed, record, largest_noise, cell, positions, species, unimodular, sublattices, starts):
    """A crystal under another basis, origin, order and orientation, as a supercell of up to 4, mirrored or not.

    Four in ten are exact; else each site moves by up to half of or the whole of largest_noise (angstrom, evenly in the
    ball), and the cell is strained by up to a tenth of that number. Returns (cell, positions, species, index, noise,
    mirrored).
    """
    s = _state(seed, DISGUISE, record)
    u = _draw(s)
    noise = 0.0 if u < 0.4 else 0.5 * largest_noise if u < 0.7 else largest_noise
    u = _draw(s)
    index = 1 if u < 0.6 else 2 if u < 0.8 else 3 if u < 0.9 else 4
    if index * len(positions) > MOST_GIVEN:
        index = 1
    mirrored = _draw(s) < 0.5
    m, h = _basis(s, cell, index, unimodular, sublattices, starts)
    back, new = _inverse(m), _product(m, cell)
    n = len(positions)
    out, kinds, order = np.empty((index * n, 3)), np.empty(index * n, np.int32), np.arange(index * n)
    for i in range(index * n - 1, 0, -1):
        j = int(_draw(s) * (i + 1))
        order[i], order[j] = order[j], order[i]
    origin = (_draw(s), _draw(s), _draw(s))
    sign = -1.0 if mirrored else 1.0
    place = 0
    # The rows of a Hermite form span a lattice of which these are all cosets.
    for t0 in range(int(h[0, 0])):
        for t1 in range(int(h[1, 1])):
            for t2 in range(int(h[2, 2])):
                for i in range(n):
                    a, b, c = sign * positions[i, 0] + t0, sign * positions[i, 1] + t1, sign * positions[i, 2] + t2
                    for k in range(3):
                        out[order[place], k] = a * back[0, k] + b * back[1, k] + c * back[2, k] + origin[k]
                    kinds[order[place]] = species[i]
                    place += 1
    if noise > 0:
        new = _shake(s, noise, out, new)
    for i in range(index * n):
        for k in range(3):
            out[i, k] -= np.floor(out[i, k])
    return _product(new, _rotation(s)), out, kinds, index, noise, mirrored
