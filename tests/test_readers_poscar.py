"""POSCAR-style text: scales, modes, species, and files that ase writes."""

import io
import itertools

import ase.io
import numpy as np
import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named

from . import strategies
from .broken_files import POSCAR

reader = reader_named("poscar")


def one(text):
    (record,) = reader.split(io.BytesIO(text.encode()), "stem", SplitOptions())
    assert record.label == "stem"
    parsed = reader.parse([record.text], ParseOptions())
    assert not parsed.refusals, parsed.refusals
    return parsed.batch


def test_scales():
    assert np.array_equal(one(POSCAR).cells[0], np.diag([4.0, 5, 6]))
    assert np.array_equal(one(POSCAR.replace("1.0", "0.5")).cells[0], np.diag([2, 2.5, 3]))
    assert np.allclose(one(POSCAR.replace("1.0", "1 2 0.5")).cells[0], np.diag([4, 10, 3]))
    assert one(POSCAR.replace("1.0", "-960")).volumes[0] == pytest.approx(960)


def test_the_factors_hold_for_cartesian_positions_too():
    text = POSCAR.replace("Direct\n0 0 0", "Selective dynamics\nCartesian\n1 2 3 T T F")
    for scale, expected in (("2", [2, 4, 6]), ("1 2 0.5", [1, 4, 1.5])):
        batch = one(text.replace("1.0", scale))
        assert np.allclose(batch.positions @ batch.cells[0], [expected])


def test_species():
    two = POSCAR.replace("0 0 0\n", "0 0 0\n.5 .5 .5 Fe extra\n\n0 0 0\n").replace("Si\n1", "Si_pv Fe/a1b2\n1 1")
    assert one(two).tokens_of(0) == ["Si", "Fe"]
    assert one(two.replace("made up\n", "Ge O\n").replace("Si_pv Fe/a1b2\n", "")).tokens_of(0) == ["Ge", "O"]
    assert one(POSCAR.replace("0 0 0\n", "0 0 1d-1\n").replace("\n", "\r\n")).positions.tolist() == [[0, 0, 0.1]]


@pytest.mark.parametrize("direct", [True, False])
def test_files_of_ase(tmp_path, direct):
    rng = np.random.default_rng(9)
    kinds = itertools.cycle(strategies.LATTICE_TYPES)
    for i in range(100):
        cell, positions, tokens = strategies.random_crystal(rng, next(kinds), int(rng.integers(1, 7)))
        atoms = ase.Atoms(tokens, cell=cell, scaled_positions=positions, pbc=True)
        ase.io.write(tmp_path / "POSCAR", atoms, format="vasp", direct=direct)
        batch = one((tmp_path / "POSCAR").read_text())
        again = ase.io.read(tmp_path / "POSCAR")
        assert batch.tokens_of(0) == again.get_chemical_symbols()
        assert np.allclose(batch.cells[0], cell, atol=1e-9), i
        assert np.allclose(batch.positions @ batch.cells[0], again.positions, atol=1e-9)
