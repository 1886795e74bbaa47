"""The audit of a witness: the match is rebuilt from the two structures as they came, and measured again.

NumPy alone; nothing of the matcher, its kernels or their conventions in code is used: only the equations of the
witness, as grouping/witness.py states them in words, and the way back of the canonical form. For a canonical crystal
with cell L, integer matrix K, rotation R, origin o, site map m and site shifts t,

    given_cell = K L R,    given_position[j] K = position[m[j]] + t[j] + o + (a deviation).

The audit takes given cell and positions and undoes these equations itself, so that a wrong K, R, o, m or t fails it
too. A layer is put upright first: its third row is replaced by one of LAYER_ROW angstrom along the normal of the other
two, on its own side, after as many given third rows as the third number of t says are taken off each site; there is no
lattice translation along the normal. Where the given structure is a supercell or a noisy one, its sites differ from the
canonical ones by up to `deviation`, which is part of what is checked and is allowed for in comparing shifts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

AGREEMENT = 1e-6
"""Measures rebuilt and recorded agree to this (angstrom; dimensionless), deviations of the given sites apart."""


LAYER_ROW = 1024.0
"""Third row of the reduced cell of a layer, angstrom along its normal: stated, as the equations are."""


@dataclass(frozen=True, slots=True)
class Given:
    """A structure as it came, and its way to the primitive crystal."""

    cell: Floats
    """(3, 3), angstrom, rows."""

    positions: Floats
    """(g, 3), fractional in `cell`."""

    tokens: list[str]
    """(g,) species tokens."""

    matrix: Ints
    """K (3, 3): cell = K @ primitive cell @ R."""

    rotation: Floats
    """R (3, 3), orthogonal."""

    origin: Floats
    """(3,), fractions of the primitive cell."""

    site_map: Ints
    """(g,): primitive site that each given site is an image of."""

    site_shift: Ints
    """t (g, 3): lattice translation, in the primitive cell, from that site to the given one."""

    residual: float
    """Largest distance of a given site from its image, angstrom, as recorded."""

    layer: bool = False
    """Periodic in the first two rows alone."""


@dataclass(frozen=True, slots=True)
class Claim:
    """A recorded match with its witness."""

    p_matrix: Ints
    q_matrix: Ints
    orthogonal: Floats
    shift: Floats
    pairing: Ints
    strain: float
    shape_strain: float
    largest_shift: float
    rms_shift: float
    volume_ratio: float
    improper: bool


def upright(given: Given) -> tuple[Floats, Floats, Ints]:
    """Cell, positions and lattice translations of a given layer after it is put upright; of a bulk crystal as given."""
    shift = np.array(given.site_shift, dtype=np.int64)
    if not given.layer:
        return given.cell, given.positions, shift
    a, b, c = given.cell
    normal = np.cross(a, b)
    normal /= np.sqrt(normal @ normal)
    cell = np.array([a, b, LAYER_ROW * (normal if normal @ c > 0 else -normal)])
    taken_off = given.positions - shift * np.array([0, 0, 1])
    shift[:, 2] = 0
    return cell, taken_off @ given.cell @ np.linalg.inv(cell), shift


def primitive_of(given: Given, failures: list[str], name: str) -> tuple[Floats, Floats, list[str], float]:
    """Primitive cell, positions and tokens by undoing the equations above, and the largest deviation found (angstrom).

    The position of a primitive site is the mean of its given images, which agree with it to the recorded residual.
    """
    k = np.asarray(given.matrix, dtype=np.int64)
    if given.layer and ((k[2] != [0, 0, k[2, 2]]).any() or k[:2, 2].any() or abs(int(k[2, 2])) != 1):
        failures.append(f"{name}: the matrix K mixes the normal of a layer with its plane")
        return given.cell, given.positions, given.tokens, np.inf
    given_cell, given_positions, site_shift = upright(given)
    index = round(abs(float(np.linalg.det(k))))
    if index < 1:
        failures.append(f"{name}: the matrix K has no inverse")
        return given.cell, given.positions, given.tokens, np.inf
    rotation = np.asarray(given.rotation)
    if not np.allclose(rotation @ rotation.T, np.eye(3), atol=1e-9):
        failures.append(f"{name}: the rotation R is not orthogonal")
    cell = np.linalg.solve(k.astype(np.float64), given_cell) @ rotation.T
    sites = len(given.positions) // index
    counts = np.bincount(given.site_map, minlength=sites)
    if len(given.positions) != sites * index or len(counts) != sites or (counts != index).any():
        failures.append(f"{name}: the site map does not give every primitive site {index} images")
        return cell, given.positions, given.tokens, np.inf
    place = given_positions @ k - given.origin - site_shift
    positions = np.zeros((sites, 3))
    np.add.at(positions, given.site_map, place / index)
    tokens = [""] * sites
    for j, token in zip(given.site_map.tolist(), given.tokens, strict=True):
        tokens[j] = tokens[j] or token
        if token != tokens[j]:
            failures.append(f"{name}: images of primitive site {j + 1} are of different species")
    worst = float(np.linalg.norm((place - positions[given.site_map]) @ cell, axis=1).max())
    if worst > 2 * given.residual + AGREEMENT:
        failures.append(f"{name}: images of one site disagree by {worst:.6f} angstrom")
    return cell, positions, tokens, worst


def _cosets(matrix: Ints) -> Ints:
    """The integer vectors that stand for the cosets of the sublattice `matrix`, in their numbering (witness.py, 3)."""
    h = [[int(v) for v in row] for row in matrix]
    for i in range(3):  # Gauss elimination over the integers, smallest remainder first
        while any(h[r][i] for r in range(i + 1, 3)):
            h[i:] = sorted(h[i:], key=lambda row: (row[i] == 0, abs(row[i])))
            for r in range(i + 1, 3):
                n = h[r][i] // h[i][i]
                h[r] = [x - n * y for x, y in zip(h[r], h[i], strict=True)]
        if h[i][i] == 0:
            h[i:] = sorted(h[i:], key=lambda row: (row[i] == 0, abs(row[i])))
    a, b, c = (abs(h[i][i]) for i in range(3))
    return np.array([[i, j, k] for i in range(a) for j in range(b) for k in range(c)], dtype=np.int64)


def _common(cell: Floats, positions: Floats, tokens: list[str], matrix: Ints) -> tuple[Floats, Floats, list[str]]:
    """Cell, positions and tokens of a crystal in the common cell, in the numbering of the witness."""
    cosets = _cosets(matrix)
    inverse = np.linalg.inv(matrix.astype(np.float64))
    placed = (positions[:, None, :] + cosets[None]) @ inverse
    return matrix @ cell, placed.reshape(-1, 3), [t for t in tokens for _ in range(len(cosets))]


def audit(a: Given, b: Given, claim: Claim, allow: float = AGREEMENT) -> list[str]:
    """What is wrong with a recorded match, in words; an empty list where everything holds."""
    failures: list[str] = []
    cell_a, x, tokens_a, deviation_a = primitive_of(a, failures, "A")
    cell_b, y, tokens_b, deviation_b = primitive_of(b, failures, "B")
    if failures:
        return failures
    p, q = np.asarray(claim.p_matrix, np.int64), np.asarray(claim.q_matrix, np.int64)
    index_p, index_q = round(abs(float(np.linalg.det(p)))), round(abs(float(np.linalg.det(q))))
    for name, index in (("P", index_p), ("Q", index_q)):
        if not 1 <= index <= 8:
            failures.append(f"|det {name}| is {index}, not 1 to 8")
    if a.layer != b.layer:
        failures.append("one of the two is a layer, the other is not")
    for name, m in (("P", p), ("Q", q)):
        if a.layer and (m[2, :2].any() or m[:2, 2].any() or abs(int(m[2, 2])) != 1):
            failures.append(f"{name} mixes the normal of a layer with its plane")
    if index_p * len(x) != index_q * len(y):
        failures.append(f"the common cell has {index_p * len(x)} sites of A and {index_q * len(y)} of B")
    if failures:
        return failures
    first, u, species_a = _common(cell_a, x, tokens_a, p)
    second, v, species_b = _common(cell_b, y, tokens_b, q)
    f = np.linalg.solve(first, second)
    left, stretches, right = np.linalg.svd(f)
    logs = np.log(stretches)
    if a.layer:  # the normal is kept, by P, Q and the frame; what is left are the two stretches of the plane
        kept = int(np.abs(logs).argmin())
        _compare(failures, "stretch along the normal", float(stretches[kept]), 1.0, allow)
        logs = np.delete(logs, kept)
    orthogonal = np.asarray(claim.orthogonal)
    if not np.allclose(orthogonal @ orthogonal.T, np.eye(3), atol=1e-9):
        failures.append("the orthogonal part is not orthogonal")
    if not np.allclose(orthogonal, left @ right, atol=1e-6):
        failures.append("the orthogonal part is not that of the map between the common cells")
    if (np.linalg.det(f) < 0) != bool(claim.improper):
        failures.append("the handedness of the map is not the recorded one")
    _compare(failures, "strain", np.abs(logs).max(), claim.strain, allow)
    _compare(failures, "shape strain", np.abs(logs - logs.mean()).max(), claim.shape_strain, allow)
    per_site = np.array([abs(np.linalg.det(cell_a)) / len(x), abs(np.linalg.det(cell_b)) / len(y)])
    _compare(failures, "volume ratio", float(per_site.max() / per_site.min()), claim.volume_ratio, allow)
    pairing = np.asarray(claim.pairing, np.int64)
    if len(pairing) != len(u) or sorted(pairing.tolist()) != list(range(len(v))):
        return [*failures, "the pairing is not one to one"]
    wrong = [k for k in range(len(u)) if species_a[k] != species_b[pairing[k]]]
    if wrong:
        failures.append(f"site {wrong[0]} of A is paired with a site of another species")
    delta = v[pairing] - u - np.asarray(claim.shift)
    delta -= np.rint(delta)
    slack = allow
    metric = (first @ first.T + second @ second.T) / 2
    mean = delta.mean(axis=0)
    if np.sqrt(mean @ metric @ mean) > slack:
        failures.append(f"the mean shift is not removed: {np.sqrt(mean @ metric @ mean):.6f} angstrom are left")
    delta -= mean
    lengths = np.sqrt(np.einsum("ni,ij,nj->n", delta, metric, delta))
    _compare(failures, "largest shift", float(lengths.max()), claim.largest_shift, slack)
    _compare(failures, "root mean square shift", float(np.sqrt((lengths**2).mean())), claim.rms_shift, slack)
    return failures


def _compare(failures: list[str], name: str, rebuilt: float, recorded: float, allow: float) -> None:
    if not abs(rebuilt - recorded) <= allow:
        failures.append(f"the {name} is {rebuilt:.7f}, recorded as {recorded:.7f}")
