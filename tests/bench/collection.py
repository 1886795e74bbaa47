"""Invented collections of any size with a known answer: how many crystals there are, and which each record shows.

35 % of the records are copies in disguise: another basis, origin, order of sites and orientation, supercells of up to
4, mirror images, sites moved by up to 0.02 angstrom (two copies then differ by up to 0.04; the limit of `near` is
0.05). The others are crystals of their own, 1 to 60 sites a primitive cell, log-normal with a median of 8 to 10.
Formulas are spread as in a real collection: most have a few records, four have a fixed share of them (thousands, once
there are hundreds of thousands of records). A CIF states no orientation; there it shows in the choice of the basis
alone.

Different numbers are different crystals. With n sites drawn at random, 1.4 angstrom apart, in some 15 n cubic
angstrom, two crystals of one composition are near only where each site of the one but the first comes within 0.1
angstrom (0.004 cubic angstrom) of one of the at most n like sites of the other: a chance of less than 0.0003 a site.
With five sites or more that is below 1e-10 a pair, whatever the lattices (48 maps, 60 origins). With fewer the lattice
is always triclinic, and six numbers of it have to agree to a hundredth: below 1e-7 a pair, with one site, of which
there are a few hundred in a million records, in eighty compositions.

Record i is the same in every collection of one seed and kind, however many records it has.
"""

from __future__ import annotations

import multiprocessing
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from lattice_census.model.batch import CrystalBatch

from .compiled import compiled
from .invented import ELEMENTS, crystal_number, formula_number, make_crystal
from .invented_disguises import MOST_GIVEN, STARTS, SUBLATTICES, UNIMODULAR, disguise

BLOCK = 2000
"""Records that are made at a time."""

PER_FILE = 20_000
"""Records of one CSV file."""


@dataclass(frozen=True, slots=True)
class Kind:
    """What sort of collection."""

    seed: int = 1
    copies: float = 0.35
    """Share of records that show a crystal again; 1: all show crystal 0."""

    common: float = 0.01
    """Chance of a crystal to have one of the common formulas drawn for it; 1: all have them. (About twice as many have
    one in the end, since later crystals take their formula from earlier ones.)"""

    noise: float = 0.02
    """Largest distance that sites are moved by, angstrom; strains are a tenth of the number."""

    formulas: int = 4
    """How many of the common formulas there are."""


ONE_COMPOSITION = Kind(common=1.0, formulas=1)
"""Different crystals of one composition, and copies of them."""

ONE_CRYSTAL = Kind(copies=1.0, common=1.0, formulas=1)
"""Copies of one crystal."""


@dataclass(frozen=True, slots=True)
class Records:
    """Records of a collection, as columns."""

    batch: CrystalBatch
    crystal: np.ndarray
    """(n,) int64: the known answer, one number a crystal."""

    index: np.ndarray
    """(n,) int64: primitive cells in the given cell."""

    noise: np.ndarray
    """(n,) float64: how far sites were moved at most, angstrom."""

    mirrored: np.ndarray
    """(n,) bool."""


@compiled
def _truth(seed, copies, start, stop):
    out = np.empty(stop - start, np.int64)
    for i in range(start, stop):
        out[i - start] = crystal_number(seed, copies, i)
    return out


@compiled
def _make(seed, copies, common, formulas, largest_noise, start, stop, most, unimodular, sublattices, starts):
    n = stop - start
    cells, counts = np.empty((n, 3, 3)), np.empty(n, np.int64)
    positions, species = np.empty((n * most, 3)), np.empty(n * most, np.int32)
    crystal, index = np.empty(n, np.int64), np.ones(n, np.int64)
    noise, mirrored = np.zeros(n), np.zeros(n, np.bool_)
    place = 0
    for i in range(n):
        c = crystal_number(seed, copies, start + i)
        f = formula_number(seed, common, c)
        if f < 0:
            f = -1 - (-1 - f) % formulas
        cell, x, kinds = make_crystal(seed, c, f)
        if c != start + i:
            cell, x, kinds, index[i], noise[i], mirrored[i] = disguise(
                seed, start + i, largest_noise, cell, x, kinds, unimodular, sublattices, starts
            )
        crystal[i], counts[i] = c, len(x)
        for j in range(3):
            for k in range(3):
                cells[i, j, k] = cell[j, k]
        for j in range(len(x)):
            for k in range(3):
                positions[place, k] = x[j, k]
            species[place] = kinds[j]
            place += 1
    return cells, counts, positions[:place], species[:place], crystal, index, noise, mirrored


def truth(kind: Kind, start: int, stop: int) -> np.ndarray:
    """(stop - start,) int64: the crystal of each record, without making it."""
    return _truth(kind.seed, kind.copies, start, stop)


def records(kind: Kind, start: int, stop: int) -> Records:
    """Records start to stop of a collection."""
    cells, counts, positions, codes, crystal, index, noise, mirrored = _make(
        kind.seed, kind.copies, kind.common, kind.formulas, kind.noise, start, stop, MOST_GIVEN, UNIMODULAR,
        SUBLATTICES, STARTS,
    )  # fmt: skip
    used = np.unique(codes)
    names = np.array([ELEMENTS[c] for c in used])
    order = np.argsort(names)
    code = np.full(len(ELEMENTS), -1, np.int32)
    code[used[order]] = np.arange(len(used))
    offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    batch = CrystalBatch(cells, offsets, positions, code[codes], tuple(names[order].tolist()))
    return Records(batch, crystal, index, noise, mirrored)


_HEAD = (
    "data_r{}\n_cell_length_a {:.8f}\n_cell_length_b {:.8f}\n_cell_length_c {:.8f}\n_cell_angle_alpha {:.8f}\n"
    "_cell_angle_beta {:.8f}\n_cell_angle_gamma {:.8f}\n_space_group_name_H-M_alt 'P 1'\nloop_\n"
    "_space_group_symop_operation_xyz\n'x, y, z'\nloop_\n_atom_site_label\n_atom_site_type_symbol\n_atom_site_fract_x\n"
    "_atom_site_fract_y\n_atom_site_fract_z\n"
)


def rows(kind: Kind, start: int, stop: int) -> Iterator[str]:
    """The lines of a CSV table: id, crystal (the known answer), disguise, cif."""
    made = records(kind, start, stop)
    batch = made.batch
    edges = np.linalg.norm(batch.cells, axis=2)
    cosines = [(batch.cells[:, i] * batch.cells[:, j]).sum(1) / (edges[:, i] * edges[:, j]) for i, j in _ANGLES]
    parameters = np.column_stack([edges, np.degrees(np.arccos(np.stack(cosines, axis=1)))]).tolist()
    positions, symbols = batch.positions.tolist(), [batch.tokens[c] for c in batch.species.tolist()]
    offsets, crystal = batch.offsets.tolist(), made.crystal.tolist()
    told = zip(made.index.tolist(), made.noise.tolist(), made.mirrored.tolist(), strict=True)
    for i, (index, noise, mirrored) in enumerate(told):
        begin, end = offsets[i], offsets[i + 1]
        name = "original" if crystal[i] == start + i else f"{index} cells {'mirrored ' * mirrored}{noise:g}"
        sites = "\n".join(
            [
                f"{s}{k} {s} {x:.8f} {y:.8f} {z:.8f}"
                for k, (s, (x, y, z)) in enumerate(zip(symbols[begin:end], positions[begin:end], strict=True), 1)
            ]
        )
        yield f'r{start + i:09},{crystal[i]},{name},"{_HEAD.format(start + i, *parameters[i])}{sites}\n"\n'


_ANGLES = ((1, 2), (0, 2), (0, 1))


def write_table(path: Path, kind: Kind, start: int, stop: int) -> Path:
    """Records start to stop as one CSV file, streamed block by block."""
    with path.open("w", encoding="utf-8", newline="") as file:
        file.write("id,crystal,disguise,cif\n")
        for block in range(start, stop, BLOCK):
            file.writelines(rows(kind, block, min(block + BLOCK, stop)))
    return path


def write_collection(folder: Path, kind: Kind, start: int, stop: int, workers: int = 1) -> Path:
    """Records start to stop as CSV files of PER_FILE records each; files that are there already are left."""
    folder.mkdir(parents=True, exist_ok=True)
    jobs = [
        (folder / f"records-{begin:09}.csv", kind, begin, min(begin + PER_FILE, stop))
        for begin in range(start, stop, PER_FILE)
    ]
    if workers == 1 or len(jobs) == 1:
        for job in jobs:
            write_table(*job)
    else:
        with multiprocessing.get_context("spawn").Pool(min(workers, len(jobs))) as pool:
            pool.starmap(write_table, jobs, chunksize=1)
    return folder
