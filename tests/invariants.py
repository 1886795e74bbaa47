"""What must hold of every result: the promises, written as functions that raise AssertionError.

Slow and plain on purpose (NumPy, no kernels), so that they can be used on any result of any test.
"""

from __future__ import annotations

import hashlib
from fractions import Fraction

import numpy as np

from lattice_census.cell.canonical import CanonicalBatch
from lattice_census.lattice.niggli import is_niggli_reduced
from lattice_census.model.batch import CrystalBatch
from lattice_census.tolerances import GRID, GRID_OFFSET, NIGGLI_EPSILON

# ---------------------------------------------------------------------------------------------------------------------
# Canonical crystals
# ---------------------------------------------------------------------------------------------------------------------


def check_accounting(given: CrystalBatch, result: CanonicalBatch) -> None:
    """Every input row is accepted or refused, never both and never neither."""
    refused = [row for row, _ in result.refusals]
    assert sorted([*result.rows.tolist(), *refused]) == list(range(len(given)))
    assert list(result.rows) == sorted(result.rows)
    assert refused == sorted(refused)
    assert all(refusal.stage == "canonical" and refusal.message for _, refusal in result.refusals)


def check_read_only(result: CanonicalBatch) -> None:
    """No array of the result can be written to."""
    for name in type(result).__slots__:
        value = getattr(result, name)
        if isinstance(value, np.ndarray):
            assert not value.flags.writeable, name


def integer_determinant(matrix: np.ndarray) -> int:
    """The determinant of an integer matrix, exactly."""
    m = [[int(x) for x in row] for row in matrix]
    return (
        m[0][0] * (m[1][1] * m[2][2] - m[1][2] * m[2][1])
        - m[0][1] * (m[1][0] * m[2][2] - m[1][2] * m[2][0])
        + m[0][2] * (m[1][0] * m[2][1] - m[1][1] * m[2][0])
    )


def close_layer(cell: np.ndarray, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """A canonical layer (third row 1024 along the normal) with a third row of twice its thickness and twice the longer
    of its two shortest independent periods, found by trying."""
    short = sorted(
        (v for v in (i * cell[0] + j * cell[1] for i in range(-3, 4) for j in range(-3, 4) if (i, j) != (0, 0))),
        key=lambda v: float(v @ v),
    )
    second = next(v for v in short if np.linalg.norm(np.cross(v, short[0])) > 1e-3 * np.linalg.norm(v))
    third = 2 * np.ptp(x[:, 2] * 1024) + 2 * np.linalg.norm(second)
    return cell * np.array([1, 1, third / 1024])[:, None], x * np.array([1, 1, 1024 / third])


def described(crystals: CrystalBatch, i: int) -> tuple[np.ndarray, np.ndarray]:
    """Cell and positions of canonical crystal i as its description is taken: of a layer, with the close third row."""
    cell, x = crystals.cells[i], crystals.positions[crystals.sites(i)]
    return (cell, x) if crystals.periodicity[i] == 3 else close_layer(cell, x)


def check_cell(crystals: CrystalBatch) -> None:
    """Canonical cells are lower triangular, right-handed, and Niggli-reduced at the tolerance or a level below it;
    layers stand in one frame, and their plane is reduced."""
    cells = np.array([described(crystals, i)[0] for i in range(len(crystals))]).reshape(-1, 3, 3)
    layers = crystals.cells[crystals.periodicity == 2]
    assert (layers[:, 2] == [0, 0, 1024]).all()
    a, b = layers[:, 0, :2], layers[:, 1, :2]
    aa, ab, bb = (a * a).sum(axis=1), (a * b).sum(axis=1), (b * b).sum(axis=1)
    room = 1e-4 * bb
    assert (aa <= bb + room).all() and (ab <= room).all() and (-2 * ab <= aa + room).all()
    assert (cells[:, [0, 0, 1], [1, 2, 2]] == 0).all()
    assert (cells[:, [0, 1, 2], [0, 1, 2]] > 0).all()
    metrics = cells @ cells.transpose(0, 2, 1)
    assert np.any([is_niggli_reduced(metrics, NIGGLI_EPSILON * 0.1**k) for k in range(6)], axis=0).all()


def check_basis(crystals: CrystalBatch) -> None:
    """Sites stand sorted by species, rarest first, then by position on the grid; the first at the origin."""
    for i in range(len(crystals)):
        x = described(crystals, i)[1]
        tokens = crystals.tokens_of(i)
        n = np.floor(x * GRID + GRID_OFFSET).astype(int)
        if crystals.periodicity[i] == 2:  # heights are signed, and sorted modulo the close third row
            assert (np.abs(x[:, 2]) < 0.5).all()
            n[:, 2] %= GRID
        assert (n[0] == 0).all()
        assert ((n >= 0) & (n < GRID)).all()
        count = {t: tokens.count(t) for t in tokens}
        order = [(count[t], t, *p) for t, p in zip(tokens, n.tolist(), strict=True)]
        assert order == sorted(order)


def check_recovery(given: CrystalBatch, result: CanonicalBatch, within: float | None = None) -> None:
    """Given cell and sites are rebuilt from the canonical crystal; `within`: largest residual (angstrom) allowed."""
    crystals = result.crystals
    for place, row in enumerate(result.rows):
        k, r = result.multiplicity_matrix[place], result.rotation[place]
        cell, positions = given.cells[row], given.positions[given.sites(row)]
        sites = slice(int(result.given_offsets[place]), int(result.given_offsets[place + 1]))
        to, shift = result.site_map[sites], result.site_shift[sites]
        if given.periodicity[row] == 2:
            place_of = (positions - shift * [0, 0, 1]) @ cell
            normal = np.cross(cell[0], cell[1])
            normal *= np.sign(normal @ cell[2]) / np.linalg.norm(normal)
            cell = np.array([cell[0], cell[1], 1024 * normal])
            positions, shift = place_of @ np.linalg.inv(cell), shift * [1, 1, 0]
            assert (k[:2, 2] == 0).all() and (k[2, :2] == 0).all() and abs(k[2, 2]) == 1
        scale = np.abs(cell).max()
        d = integer_determinant(k)
        assert (
            abs(d)
            == result.supercell_index[place]
            == len(given.species[given.sites(row)]) // len(crystals.species[crystals.sites(place)])
        )
        assert np.sign(d) == np.sign(np.linalg.det(cell))
        assert np.abs(r @ r.T - np.eye(3)).max() < 1e-9
        assert np.linalg.det(r) > 0
        assert np.abs(k @ crystals.cells[place] @ r - cell).max() < 1e-8 * scale
        x = crystals.positions[crystals.sites(place)][to] + shift + result.origin[place]
        gap = positions @ cell - x @ crystals.cells[place] @ r
        assert np.linalg.norm(gap, axis=1).max() <= result.residual[place] + 1e-7
        if within is not None:
            assert result.residual[place] <= within
        # Every canonical site is met |det K| times, by sites of its own species.
        assert (np.bincount(to) == abs(d)).all()
        assert [crystals.tokens_of(place)[s] for s in to] == given.tokens_of(row)


def check_pseudo(result: CanonicalBatch) -> None:
    """The approximate translation lattice is a superlattice, and its translations map sites onto like sites."""
    crystals = result.crystals
    for place in range(len(result)):
        h = result.pseudo_matrix[place]
        index = int(result.pseudo_index[place])
        assert integer_determinant(h) == index
        assert (h[[0, 0, 1], [1, 2, 2]] == 0).all()
        if index == 1:
            assert result.pseudo_residual[place] == 0
            continue
        # Rows of inv(H), as exact fractions of the canonical cell.
        adjugate = np.rint(np.linalg.inv(h) * index).astype(int)
        assert (h @ adjugate == index * np.eye(3, dtype=int)).all()
        x, cell = crystals.positions[crystals.sites(place)], crystals.cells[place]
        tokens = np.array(crystals.tokens_of(place))
        for row in adjugate:
            t = np.array([float(Fraction(int(v), index)) for v in row])
            d = x[:, None] + t - x[None]
            gap = np.linalg.norm((d - np.rint(d)) @ cell, axis=-1)
            gap[tokens[:, None] != tokens[None]] = np.inf
            assert gap.min(axis=1).max() <= 2 * result.pseudo_residual[place] + 1e-9


def key_of(crystals: CrystalBatch, i: int) -> str:
    """The key of canonical crystal i, written out once more from its definition."""
    (cell, x), tokens = described(crystals, i), crystals.tokens_of(i)
    size = np.cbrt(abs(np.linalg.det(cell)) / len(x))
    g = cell @ cell.T / size**2

    def grid(v: np.ndarray) -> np.ndarray:
        return np.floor(np.asarray(v) * GRID + GRID_OFFSET).astype(int)

    head = [*grid(g[[0, 1, 2, 1, 0, 0], [0, 1, 2, 2, 2, 1]]), grid(size), len(x)]
    text = "".join(f"{t}\t{tokens.count(t)}\n" for t in dict.fromkeys(tokens))
    digest = hashlib.sha256(b"crystal-key-1" + bytes([crystals.periodicity[i]]))
    digest.update(b"".join(int(v).to_bytes(8, "little", signed=True) for v in head))
    digest.update(text.encode() + b"\0")
    digest.update(b"".join(int(v).to_bytes(4, "little") for v in (grid(x) % GRID).ravel()))
    return digest.hexdigest()


def check_keys(result: CanonicalBatch) -> None:
    """Keys are what their definition says."""
    assert len(result.crystal_key) == len(result)
    for i, key in enumerate(result.crystal_key):
        assert key == key_of(result.crystals, i)


def check_fixed_point(result: CanonicalBatch, again: CanonicalBatch) -> None:
    """`again`, the canonical form of the canonical crystals of `result`, is the same to 1e-9."""
    assert len(again) == len(result) and not again.refusals
    assert again.crystal_key == result.crystal_key
    assert (again.crystals.offsets == result.crystals.offsets).all()
    assert np.abs(again.crystals.cells - result.crystals.cells).max() < 1e-9
    assert np.abs(again.crystals.positions - result.crystals.positions).max() < 1e-9
    assert (again.crystals.species == result.crystals.species).all()
    assert (again.supercell_index == 1).all()
    assert (again.pseudo_index == result.pseudo_index).all()
    assert (again.pseudo_matrix == result.pseudo_matrix).all()


def check_canonical(given: CrystalBatch, result: CanonicalBatch, within: float | None = None) -> None:
    """All of the above that need no second run."""
    check_accounting(given, result)
    check_read_only(result)
    check_cell(result.crystals)
    check_basis(result.crystals)
    check_recovery(given, result, within)
    check_pseudo(result)
    check_keys(result)


# ---------------------------------------------------------------------------------------------------------------------
# Groupings
# ---------------------------------------------------------------------------------------------------------------------


def check_grouping(grouping, rank: dict[str, int], near: dict[tuple[str, str], bool], grade: str) -> None:
    """Families, groups and ids of one grade against all true pairs of ids (`near`, both orders), by their
    definitions."""
    ids = grouping.ids.tolist()
    members = grouping.members[grade]
    assert ids == sorted(ids) and len(set(ids)) == len(ids)
    family = dict(zip(ids, members.family_id.tolist(), strict=True))
    group = dict(zip(ids, members.group_id.tolist(), strict=True))
    # Families are the connected components, named by their smallest id.
    left, components = set(ids), []
    while left:
        todo, found = [min(left)], set()
        while todo:
            i = todo.pop()
            if i not in found:
                found.add(i)
                todo += [j for j in left if j not in found and near.get((i, j), False)]
        components.append(found)
        left -= found
    for found in components:
        assert {family[i] for i in found} == {min(found)}
    # Groups are stars in keep order, named by the kept record.
    free, expected = set(ids), {}
    for i in sorted(ids, key=lambda i: (rank[i], i)):
        if i in free:
            star = {i} | {j for j in free if near.get((i, j), False)}
            expected.update(dict.fromkeys(star, i))
            free -= star
    assert group == expected
    assert members.kept.tolist() == [group[i] == i for i in ids]


def check_matches(grouping) -> None:
    """Stored pairs are in order, every set-aside record of another key has its kept record, families are spanned."""
    pairs = grouping.matches.pairs
    assert (pairs[:, 0] < pairs[:, 1]).all()
    assert len(np.unique(pairs, axis=0)) == len(pairs)
    stored = {tuple(p) for p in pairs.tolist()}
    place = {name: i for i, name in enumerate(grouping.ids.tolist())}
    for members in grouping.members.values():
        parent = list(range(len(place)))

        def root(i: int, parent=parent) -> int:
            while parent[i] != i:
                i = parent[i]
            return i

        for a, b in stored:
            parent[root(a)] = root(b)
        for i, (family, group) in enumerate(zip(members.family_id.tolist(), members.group_id.tolist(), strict=True)):
            a, b = sorted((int(grouping.node[i]), int(grouping.node[place[group]])))
            assert a == b or (a, b) in stored
            assert root(int(grouping.node[i])) == root(int(grouping.node[place[family]]))
