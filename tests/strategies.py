"""What the tests draw from: lattices of all 14 types, crystals on them, disguises, and noise.

Everything takes a seeded numpy Generator, so that a failing case can be drawn again. A crystal here is the triple
(cell (3, 3), positions (n, 3), tokens list of n), rows are vectors, positions are fractional.
"""

from __future__ import annotations

import itertools
from functools import cache

import numpy as np

from lattice_census.demo.disguises import Crystal, hermite_matrices, mirror, rotation, supercell, unimodular
from lattice_census.demo.structure_types import structure_types
from lattice_census.model.batch import CrystalBatch, batch_from_lists

__all__ = ["Crystal", "hermite_matrices", "mirror", "rotation", "supercell", "unimodular"]

LATTICE_TYPES = ("aP", "mP", "mS", "oP", "oS", "oI", "oF", "tP", "tI", "hR", "hP", "cP", "cI", "cF")

# Rows: primitive vectors in the conventional basis (common practice, no source).
PRIMITIVE = {
    "P": np.eye(3),
    "S": np.array([[0.5, 0.5, 0], [-0.5, 0.5, 0], [0, 0, 1]]),
    "I": np.array([[-0.5, 0.5, 0.5], [0.5, -0.5, 0.5], [0.5, 0.5, -0.5]]),
    "F": np.array([[0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]]),
    "R": np.array([[2, 1, 1], [-1, 1, 1], [-1, -2, 1]]) / 3,
}


def cell_from_parameters(a, b, c, alpha, beta, gamma) -> np.ndarray:
    """Rows a, b, c from edges (angstrom) and angles (degrees); a along x, b in the xy plane."""
    al, be, ga = np.radians([alpha, beta, gamma])
    cx = np.cos(be)
    cy = (np.cos(al) - np.cos(be) * np.cos(ga)) / np.sin(ga)
    return np.array([[a, 0, 0], [b * np.cos(ga), b * np.sin(ga), 0], [c * cx, c * cy, c * np.sqrt(1 - cx**2 - cy**2)]])


def conventional_cell(rng: np.random.Generator, lattice_type: str) -> np.ndarray:
    """A random conventional cell, edges 3 to 9 angstrom, kept away from every higher type."""
    while True:
        a, b, c = rng.uniform(3, 9, 3)
        al, be, ga = rng.uniform(65, 115, 3)
        apart = min(abs(np.log(a / b)), abs(np.log(a / c)), abs(np.log(b / c))) > 0.05
        family = lattice_type[0]
        if family == "a" and apart and min(abs(np.array([al, be, ga]) - 90)) > 3:
            if 1 - np.cos(np.radians([al, be, ga])) @ np.cos(np.radians([al, be, ga])) > 0.3:
                return cell_from_parameters(a, b, c, al, be, ga)
        elif family == "m" and apart and abs(be - 90) > 5:
            return cell_from_parameters(a, b, c, 90, be, 90)
        elif family == "o" and apart and abs(np.log(b / a / np.sqrt(3))) > 0.05 < abs(np.log(a / b / np.sqrt(3))):
            return cell_from_parameters(a, b, c, 90, 90, 90)
        elif family == "t" and min(abs(np.log(c / a)), abs(np.log(c / a / np.sqrt(2)))) > 0.05:
            return cell_from_parameters(a, a, c, 90, 90, 90)
        elif family == "h" and (lattice_type == "hP" or min(abs(np.log(c / a / np.sqrt([6, 1.5, 0.375])))) > 0.05):
            return cell_from_parameters(a, a, c, 90, 90, 120)
        elif family == "c":
            return cell_from_parameters(a, a, a, 90, 90, 90)


def primitive_cell(rng: np.random.Generator, lattice_type: str) -> np.ndarray:
    """A random primitive cell of the type (before any change of basis)."""
    return PRIMITIVE[lattice_type[1]] @ conventional_cell(rng, lattice_type)


def least_distance(cell: np.ndarray, positions: np.ndarray) -> float:
    """Least distance between two sites or a site and its image, over 2 shells of neighbouring cells (slow)."""
    shifts = np.array(list(itertools.product(range(-2, 3), repeat=3)))
    d = positions[:, None, None] - positions[None, :, None] + shifts
    r = np.linalg.norm(d @ cell, axis=-1)
    return float(r[r > 1e-9].min()) if (r > 1e-9).any() else np.inf


def random_crystal(
    rng: np.random.Generator,
    lattice_type: str = "aP",
    sites: int = 4,
    elements: tuple[str, ...] = ("Si", "O"),
    apart: float = 1.2,
) -> Crystal:
    """A crystal of random sites on a random primitive lattice of the type: the basis has no symmetry.

    The cell is scaled up where it is too small for its sites.
    """
    cell = primitive_cell(rng, lattice_type)
    least = 9.0 * sites
    cell *= max(1.0, (least / abs(np.linalg.det(cell))) ** (1 / 3))
    while True:
        positions = rng.random((sites, 3))
        if least_distance(reduced(cell), positions @ cell @ np.linalg.inv(reduced(cell))) > apart:
            break
    tokens = [elements[i % len(elements)] for i in range(sites)]
    return cell, positions, tokens


def reduced(cell: np.ndarray) -> np.ndarray:
    """A short basis by repeated pairwise subtraction (slow and simple; for the tests' own distances)."""
    cell = cell.copy()
    while True:
        changed = False
        for i, j in itertools.permutations(range(3), 2):
            n = np.round(cell[i] @ cell[j] / (cell[j] @ cell[j]))
            shorter = cell[i] - n * cell[j]
            if n and shorter @ shorter < cell[i] @ cell[i] * (1 - 1e-9):
                cell[i] = shorter
                changed = True
        for s1, s2 in itertools.product((-1, 1), repeat=2):
            v = cell[2] + s1 * cell[0] + s2 * cell[1]
            if v @ v < cell[2] @ cell[2] * (1 - 1e-9):
                cell[2] = v
                changed = True
        if not changed:
            return cell
        cell = cell[np.argsort((cell**2).sum(1))]


def disguise(
    rng: np.random.Generator,
    crystal: Crystal,
    max_index: int = 8,
    noise: float = 0.0,
    strain: float = 0.0,
    handed: int | None = None,
) -> Crystal:
    """The same crystal under another cell, origin, order and orientation; with noise if asked for.

    max_index: largest supercell. noise: each site moves by a vector of length up to this (angstrom), uniform in the
    ball. strain: each principal logarithmic stretch is within this. handed: +1 or -1 for the basis; None for either.
    """
    index = int(rng.integers(1, max_index + 1))
    matrices = hermite_matrices(index)
    matrix = unimodular(rng, 5, handed) @ matrices[rng.integers(len(matrices))]
    if abs(matrix).max() > 40:
        return disguise(rng, crystal, max_index, noise, strain, handed)
    cell, positions, tokens = supercell(crystal, matrix)
    positions = positions + rng.random(3)
    if noise:
        v = rng.normal(size=positions.shape)
        v *= noise * rng.random((len(v), 1)) ** (1 / 3) / np.linalg.norm(v, axis=1, keepdims=True)
        positions = positions + v @ np.linalg.inv(cell)
    if strain:
        axes = rotation(rng)
        cell = cell @ axes.T @ np.diag(np.exp(rng.uniform(-strain, strain, 3))) @ axes
    order = rng.permutation(len(tokens))
    positions = positions[order] - np.floor(positions[order])
    return cell @ rotation(rng), positions, [tokens[i] for i in order]


@cache
def type_crystals() -> tuple[Crystal, ...]:
    """The structure types of the package as crystals in their conventional cells."""
    return tuple((t.cell, t.positions, list(t.species)) for t in structure_types())


def batch(crystals: list[Crystal]) -> CrystalBatch:
    """The batch of a list of crystals."""
    return batch_from_lists([c[0] for c in crystals], [c[1] for c in crystals], [c[2] for c in crystals])


# ---------------------------------------------------------------------------------------------------------------------
# Layers: crystals whose third row is only a frame
# ---------------------------------------------------------------------------------------------------------------------

LAYER_TYPES = ("mp", "op", "oc", "tp", "hp")


def plane_cell(rng: np.random.Generator, layer_type: str) -> np.ndarray:
    """A random primitive plane cell (2, 2) of a layer type, kept away from every higher type."""
    a, b = rng.uniform(3, 4), rng.uniform(4.5, 6)
    if layer_type == "mp":
        return np.array([[a, 0], [a * rng.uniform(0.15, 0.35), b]])
    if layer_type == "op":
        return np.diag([a, b])
    if layer_type == "oc":
        while min(abs(np.log(b / a)), abs(np.log(b / a / np.sqrt(3)))) < 0.05:
            b = rng.uniform(4.5, 6)
        return np.array([[a, b], [-a, b]]) / 1.6
    return a * (np.eye(2) if layer_type == "tp" else np.array([[1, 0], [-0.5, np.sqrt(0.75)]]))


def upright(plane: np.ndarray, cartesian: np.ndarray, vacuum: float = 12.0) -> tuple[np.ndarray, np.ndarray]:
    """Cell and fractional positions of a layer with `vacuum` (angstrom) above it; cartesian (n, 3), heights along z."""
    cell = np.zeros((3, 3))
    cell[:2, :2] = plane
    cell[2, 2] = np.ptp(cartesian[:, 2]) + vacuum
    return cell, cartesian @ np.linalg.inv(cell)


def random_layer(
    rng: np.random.Generator,
    layer_type: str = "mp",
    sites: int = 4,
    elements: tuple[str, ...] = ("Si", "O"),
    thickness: float = 3.0,
    apart: float = 1.2,
) -> Crystal:
    """A layer of random sites on a random plane lattice of the type: the basis has no symmetry."""
    plane = plane_cell(rng, layer_type)
    while True:
        place = np.concatenate([rng.random((sites, 2)) @ plane, thickness * rng.random((sites, 1))], axis=1)
        cell, positions = upright(plane, place)
        if least_distance(cell, positions) > apart:
            return cell, positions, [elements[i % len(elements)] for i in range(sites)]


def plane_matrix(rng: np.random.Generator, index: int) -> np.ndarray:
    """A random integer (3, 3) that makes an in-plane supercell of `index` and may turn the layer upside down."""
    while True:
        forms = [h for h in hermite_matrices(index) if h[2, 2] == 1]
        m = np.array(forms[rng.integers(len(forms))])
        for _ in range(3):
            i = rng.integers(2)
            m[i] += rng.integers(-2, 3) * m[1 - i]
        m[rng.integers(3)] *= rng.choice((-1, 1))
        m[:2, 2] = m[2, :2] = 0
        m[2, 2] = rng.choice((-1, 1))
        if abs(m).max() <= 20 and abs(round(np.linalg.det(m))) == index:
            return m


def disguise_layer(
    rng: np.random.Generator, layer: Crystal, max_index: int = 6, noise: float = 0.0, strain: float = 0.0
) -> Crystal:
    """The same layer in another cell, order and orientation, with another vacuum, a tilted third row, somewhere along
    the normal (across a face of the cell, too) and either way up.

    noise: each site moves by a vector of length up to this (angstrom). strain: the two principal logarithmic stretches
    in the plane are within this; heights are kept.
    """
    cell, positions, tokens = supercell(layer, plane_matrix(rng, int(rng.integers(1, max_index + 1))))
    place = positions @ cell
    if noise:
        v = rng.normal(size=place.shape)
        place = place + v * noise * rng.random((len(v), 1)) ** (1 / 3) / np.linalg.norm(v, axis=1, keepdims=True)
    turn = rng.uniform(0, np.pi)
    axes = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    stretch = np.eye(3)
    stretch[:2, :2] = axes.T @ np.diag(np.exp(rng.uniform(-strain, strain, 2))) @ axes
    cell, place = cell @ stretch, place @ stretch
    cell[2] *= (np.ptp(place[:, 2]) + rng.uniform(6, 30)) / abs(cell[2, 2])
    cell[2] += rng.uniform(-1, 1, 2) @ cell[:2]
    positions = place @ np.linalg.inv(cell) + rng.random(3)
    order = rng.permutation(len(tokens))
    positions = positions[order] - np.floor(positions[order])
    return cell @ rotation(rng), positions, [tokens[i] for i in order]


def layers(crystals: list[Crystal]) -> CrystalBatch:
    """The batch of a list of layers."""
    one = batch(crystals)
    periodicity = np.full(len(one), 2, np.uint8)
    return CrystalBatch(one.cells, one.offsets, one.positions, one.species, one.tokens, periodicity)
