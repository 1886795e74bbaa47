"""Plain twins of the key and of the match of layers: plane vectors, heights in angstrom; NumPy and loops alone.

They share neither code nor conventions with the package. The key rounds positions, so that it is good for layers whose
numbers are far from the edges of the rounding, which the tests draw. The match tries every pair of plane sublattices up
to an index, every basis of the one whose two stretches are within the window, both sides up, and every origin.
"""

from __future__ import annotations

import itertools

import numpy as np

from .slow_match import SlowMatch, bottleneck, grade_of

DIGITS = 4


def short_vectors(plane: np.ndarray) -> list[np.ndarray]:
    """Lattice vectors of a short basis with coefficients up to 2."""
    a, b = plane
    while True:
        if b @ b < a @ a:
            a, b = b, a
        n = round(float(a @ b / (a @ a)))
        if n == 0:
            break
        b = b - n * a
    return [i * a + j * b for i, j in itertools.product(range(-2, 3), repeat=2) if (i, j) != (0, 0)]


def upright_sites(cell: np.ndarray, positions: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Plane vectors (2, 2) and Cartesian sites (n, 3) of a layer, z along the normal, the slab in one piece."""
    normal = np.cross(cell[0], cell[1])
    normal = normal / np.linalg.norm(normal)
    first = cell[0] / np.linalg.norm(cell[0])
    frame = np.array([first, np.cross(normal, first), normal])
    x = np.asarray(positions, float).copy()
    order = np.sort(x[:, 2] % 1)
    gaps = np.append(order[1:], order[0] + 1) - order
    cut = order[gaps.argmax()] + gaps.max() / 2
    x[:, 2] -= np.floor(x[:, 2] - cut)
    return (cell @ frame.T)[:2, :2], x @ cell @ frame.T


def slow_key(cell: np.ndarray, positions: np.ndarray, tokens: list[str]) -> tuple:
    """Equal for primitive layers that a proper motion brings onto each other; the slab in one piece, at any angle."""
    plane, place = upright_sites(cell, positions)
    area = abs(np.linalg.det(plane))
    vectors = short_vectors(plane)
    shortest = min(v @ v for v in vectors)
    best = None
    for up in (1.0, -1.0):
        turn = np.diag([1.0, up, up])
        flat = [v @ turn[:2, :2] for v in vectors]
        for a, b in itertools.product(flat, repeat=2):
            det = a[0] * b[1] - a[1] * b[0]
            if abs(a @ a - shortest) > 1e-6 or abs(det - area) > 1e-6 * area or not -1e-6 <= -2 * a @ b <= a @ a + 1e-6:
                continue
            if any(abs(c[0] * a[1] - c[1] * a[0]) > 1e-6 and c @ c < b @ b - 1e-6 for c in flat):
                continue
            inverse = np.linalg.inv(np.array([a, b]))
            p = place @ turn
            for o in p:
                at = (p - o)[:, :2] @ inverse
                at = np.round(at + 3e-5, DIGITS) % 1
                rows = sorted(zip(tokens, *np.round(at, DIGITS).T, np.round((p - o)[:, 2] + 3e-5, DIGITS), strict=True))
                metric = tuple(np.round([a @ a + 3e-5, a @ b + 3e-5, b @ b + 3e-5], DIGITS))
                candidate = (metric, tuple((t, float(u), float(v), float(w)) for t, u, v, w in rows))
                if best is None or candidate < best:
                    best = candidate
    assert best is not None
    return best


def plane_sublattices(index: int) -> list[np.ndarray]:
    """All plane Hermite forms of a determinant."""
    return [
        np.array([[a, p], [0, index // a]]) for a in range(1, index + 1) if index % a == 0 for p in range(index // a)
    ]


def plane_supercell(plane: np.ndarray, place: np.ndarray, matrix: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Plane vectors and sites in the cell matrix @ plane; images of one site stand together."""
    steps = list(itertools.product(range(matrix[0, 0]), range(matrix[1, 1])))
    moved = np.array([np.append(np.array(n) @ plane, 0.0) for n in steps])
    return matrix @ plane, (place[:, None] + moved[None]).reshape(-1, 3)


def slow_layer_match(a, b, shifts: tuple, strains: tuple, largest_index: int = 1) -> SlowMatch | None:
    """The recorded match of two layers, (cell, positions, tokens) each, among all common cells up to an index."""
    best: SlowMatch | None = None
    (plane_a, place_a), (plane_b, place_b) = upright_sites(*a[:2]), upright_sites(*b[:2])
    for dp, dq in itertools.product(range(1, largest_index + 1), repeat=2):
        if len(a[2]) * dp != len(b[2]) * dq:
            continue
        tokens = [np.array([t for t in c[2] for _ in range(d)]) for c, d in ((a, dp), (b, dq))]
        if sorted(tokens[0]) != sorted(tokens[1]):
            continue
        for p in plane_sublattices(dp):
            first, sites = plane_supercell(plane_a, place_a, p)
            for q in plane_sublattices(dq):
                second, others = plane_supercell(plane_b, place_b, q)
                for basis in _plane_bases(first, second, strains[2]):
                    for up in (1.0, -1.0):
                        found = _best_pairing(first, sites, basis, others * [1, 1, up], tokens, up, shifts, strains)
                        if found is not None and (best is None or _rank(found) < _rank(best)):
                            best = found
    return best


def _rank(x: SlowMatch) -> tuple:
    return x.grade, round(x.shift, 9), not x.proper, round(x.strain, 9)


def _stretches(first: np.ndarray, second: np.ndarray) -> np.ndarray:
    return np.log(np.linalg.svd(np.linalg.solve(first, second), compute_uv=False))


def _plane_bases(first: np.ndarray, second: np.ndarray, limit: float) -> list[np.ndarray]:
    """All bases of the lattice of `second` whose two stretches against the basis `first` are within the limit."""
    reach = np.exp(limit) * np.linalg.norm(first, axis=1).max() * 1.000001
    box = np.floor(reach * np.linalg.norm(np.linalg.inv(second), axis=0)).astype(int)
    grid = np.array(list(itertools.product(*(range(-n, n + 1) for n in box)))) @ second
    lengths = np.maximum(np.linalg.norm(grid, axis=1), 1e-9)
    near = [grid[np.abs(np.log(lengths / np.linalg.norm(row))) <= limit + 1e-9] for row in first]
    out = []
    for x, y in itertools.product(*near):
        basis = np.array([x, y])
        whole = abs(abs(np.linalg.det(basis)) / abs(np.linalg.det(second)) - 1) < 1e-6
        if whole and np.abs(_stretches(first, basis)).max() <= limit + 1e-9:
            out.append(basis)
    return out


def _best_pairing(first, sites, basis, others, tokens, up, shifts, strains) -> SlowMatch | None:
    proper = np.linalg.det(first) * np.linalg.det(basis) * up > 0
    logs = _stretches(first, basis)
    strain, shape = np.abs(logs).max(), np.abs(logs - logs.mean()).max()
    g = np.eye(3)
    g[:2, :2] = (first @ first.T + basis @ basis.T) / 2
    u = np.column_stack([sites[:, :2] @ np.linalg.inv(first), sites[:, 2]])
    v = np.column_stack([others[:, :2] @ np.linalg.inv(basis), others[:, 2]])
    images = np.array([(*n, 0) for n in itertools.product((-1, 0, 1), repeat=2)])
    kinds = sorted(set(tokens[0]), key=lambda t: ((tokens[0] == t).sum(), t))
    pin = int(np.flatnonzero(tokens[0] == kinds[0])[0])
    best = None
    for origin in np.flatnonzero(tokens[1] == kinds[0]):
        shift = v[origin] - u[pin]
        previous = None
        for _ in range(20):
            d = v[None] - u[:, None] - shift
            d[..., :2] -= np.round(d[..., :2])
            all_d = d[:, :, None] + images
            r = np.einsum("...i,ij,...j", all_d, g, all_d)
            d = np.take_along_axis(all_d, r.argmin(axis=2)[:, :, None, None], axis=2)[:, :, 0]
            r = np.einsum("...i,ij,...j", d, g, d)
            r[tokens[0][:, None] != tokens[1][None]] = 1e6
            if np.sqrt(r.min(axis=1).max()) > 2 * shifts[2] + 1e-6:
                break
            pairing = bottleneck(r)
            chosen = d[np.arange(len(u)), pairing]
            shift = shift + chosen.mean(axis=0)
            away = chosen - chosen.mean(axis=0)
            lengths = np.einsum("ni,ij,nj->n", away, g, away)
            grade = grade_of(np.sqrt(lengths.max()), strain, shifts, strains)
            if grade is not None:
                found = SlowMatch(grade, np.sqrt(lengths.max()), strain, shape, np.sqrt(lengths.mean()), bool(proper))
                if best is None or _rank(found) < _rank(best):
                    best = found
            if previous is not None and (previous == pairing).all():
                break
            previous = pairing
    return best
