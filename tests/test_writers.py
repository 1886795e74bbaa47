"""What is written as CIF, extended XYZ and POSCAR-style text is read back by other programs' readers and by ours."""

import io
import itertools

import ase.io
import extxyz
import gemmi
import numpy as np
import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.output.cif import block_name, cif_text, quoted
from lattice_census.output.extxyz import extxyz_text
from lattice_census.output.poscar import poscar_text
from lattice_census.readers import reader_named

from . import strategies

WRITERS = {"cif": cif_text, "extxyz": extxyz_text, "poscar": poscar_text}


def crystals(seed, count=200, mixed=False):
    rng = np.random.default_rng(seed)
    kinds = itertools.cycle(strategies.LATTICE_TYPES)
    for _ in range(count):
        cell, positions, tokens = strategies.random_crystal(rng, next(kinds), int(rng.integers(1, 6)))
        if np.linalg.det(cell) < 0:
            cell = -cell
        cell = cell @ strategies.rotation(rng)
        if mixed:
            choice = ("Si", "Fe0.5Ni0.5", "Li0.25", "Fe0.3333Mn0.3333Ni0.3334")
            tokens = [str(rng.choice(choice)) for _ in tokens]
        yield cell, positions + rng.integers(-2, 3, positions.shape), tokens


def read(name, text):
    (record,) = reader_named(name).split(io.BytesIO(text.encode()), "stem", SplitOptions())
    assert record.refusal is None, record.refusal
    parsed = reader_named(name).parse([record.text], ParseOptions())
    assert not parsed.refusals, parsed.refusals
    return record, parsed.batch


def same_metric(a, b):
    scale = np.abs(a @ a.T).max()
    return np.abs(a @ a.T - b @ b.T).max() < 1e-11 * scale


@pytest.mark.parametrize("name", WRITERS)
def test_our_reader_gives_back_what_was_written(name):
    for i, (cell, positions, tokens) in enumerate(crystals(10, mixed=name != "poscar")):
        record, batch = read(name, WRITERS[name](cell, positions, tokens, f"no. {i}"))
        assert batch.tokens_of(0) == tokens
        assert np.abs(batch.positions - positions).max() < 1e-11
        assert same_metric(batch.cells[0], cell)
        if name != "cif":
            assert np.abs(batch.cells[0] - cell).max() < 1e-12
        if name == "extxyz":
            assert record.label == f"no. {i}"


@pytest.mark.parametrize("name", WRITERS)
def test_ase_reads_what_was_written(name, tmp_path):
    path = tmp_path / f"x.{name}"
    for cell, positions, tokens in crystals(11):
        path.write_text(WRITERS[name](cell, positions, tokens, "x"))
        atoms = ase.io.read(path, format={"cif": "cif", "extxyz": "extxyz", "poscar": "vasp"}[name])
        assert atoms.get_chemical_symbols() == tokens
        assert same_metric(np.array(atoms.cell), cell)
        d = atoms.get_scaled_positions(wrap=False) - positions
        assert np.abs(d - np.rint(d)).max() < 1e-9


def test_gemmi_reads_what_was_written_also_mixed_sites():
    for cell, positions, tokens in crystals(12, mixed=True):
        small = gemmi.make_small_structure_from_block(
            gemmi.cif.read_string(cif_text(cell, positions, tokens)).sole_block()
        )
        assert np.allclose(small.cell.parameters[:3], np.linalg.norm(cell, axis=1), rtol=1e-14)
        rows = [(t, p) for t, p in zip(tokens, positions, strict=True) for _ in range(max(1, t.count(".")))]
        assert len(small.sites) == len(rows)
        for site, (token, position) in zip(small.sites, rows, strict=True):
            assert site.element.name in token and np.abs(np.array(site.fract.tolist()) - position).max() < 1e-12
            assert site.occ == 1 if "." not in token else f"{site.element.name}{site.occ:g}" in token


def test_the_extxyz_package_reads_what_was_written(tmp_path):
    kept = list(crystals(13))
    (tmp_path / "all.xyz").write_text("".join(extxyz_text(*c, f"L{i}", {"e": i / 3}) for i, c in enumerate(kept)))
    frames = list(extxyz.iread_dicts(str(tmp_path / "all.xyz"), use_cextxyz=False))
    assert len(frames) == 200
    for i, (frame, (cell, positions, tokens)) in enumerate(zip(frames, kept, strict=True)):
        assert np.allclose(np.asarray(frame.cell).T, cell, atol=1e-12) and list(frame.pbc) == [True] * 3
        assert list(frame.arrays["species"]) == tokens
        assert np.allclose(frame.arrays["pos"], positions @ cell, atol=1e-9)
        assert frame.info == {"label": f"L{i}", "e": i / 3}


def test_a_left_handed_cell_keeps_its_hand_in_a_cif():
    rng = np.random.default_rng(14)
    cell, positions, tokens = strategies.random_crystal(rng)
    cell = cell if np.linalg.det(cell) < 0 else -cell
    _, batch = read("cif", cif_text(cell, positions, tokens))
    # The same points in space but for a rotation: distances and the sign of a triple product of three of them.
    again, before = batch.positions @ batch.cells[0], positions @ cell
    turn = np.linalg.solve(-cell, batch.cells[0])
    assert np.linalg.det(turn) == pytest.approx(1) and np.allclose(turn @ turn.T, np.eye(3))
    assert np.allclose(before @ turn, again)


def test_layers_keep_their_periodicity_in_extended_xyz():
    cell, positions, tokens = strategies.random_crystal(np.random.default_rng(15))
    _, batch = read("extxyz", extxyz_text(cell, positions, tokens, "layer", periodicity=2))
    assert batch.periodicity.tolist() == [2] and np.allclose(batch.cells[0], cell, atol=1e-12)


AWKWARD = [
    "a b", "data_x", "it's", 'say "no"', "it's \"both\" '", "", "?", ".", "_tag", "#note", "$x", "[1]", ";semi",
    "loop_", "line\nline", "line\n;data_y\n", "tab\there", "\0nul", "é", "'", '"', "a' b", "\\", "x=1", "'; DROP TABLE",
    "9" * 300,
]  # fmt: skip


@pytest.mark.parametrize("name", AWKWARD)
def test_any_name_and_value_is_quoted_safely(name):
    cell, positions, tokens = np.diag([4.0, 5, 6]), np.array([[0.1, 0.2, 0.3]]), ["Si"]
    text = cif_text(
        cell, positions, tokens, name, {"_made_up_label": name, "_made_up_energy": -1.5, "_made_up_none": None}
    )
    block = gemmi.cif.read_string(text).sole_block()
    expected = " ".join(name.replace("\0", "_").splitlines())
    assert gemmi.cif.as_string(block.find_value("_made_up_label")) == expected
    assert float(block.find_value("_made_up_energy")) == -1.5 and block.find_value("_made_up_none") == "?"
    assert read("cif", text)[1].positions.tolist() == positions.tolist()
    record, batch = read("extxyz", extxyz_text(cell, positions, tokens, name, {"odd key": name, "n": 3, "flag": True}))
    assert np.allclose(batch.positions, positions)
    assert record.properties["n"] == 3 and record.properties["flag"] is True
    assert read("poscar", poscar_text(cell, positions, tokens, name))[1].tokens_of(0) == ["Si"]


def test_names_of_blocks_and_bad_tags():
    assert block_name("a b/c") == "a_b_c" and block_name("") == "crystal" and len(block_name("x" * 500)) <= 75
    assert quoted(True) == "yes" and quoted(0.1) == "0.1" and quoted(3) == "3"
    with pytest.raises(ValueError):
        cif_text(np.eye(3), np.zeros((1, 3)), ["Si"], "x", {"no tag": 1})


def test_a_poscar_of_a_mixed_site_is_not_written():
    with pytest.raises(ValueError, match=r"Fe0\.5Ni0\.5"):
        poscar_text(np.eye(3), np.zeros((1, 3)), ["Fe0.5Ni0.5"])


def test_files_of_ase_as_cif_are_read(tmp_path):
    reader = reader_named("cif")
    for cell, positions, tokens in crystals(16, 60):
        atoms = ase.Atoms(tokens, cell=cell, scaled_positions=positions % 1, pbc=True)
        ase.io.write(tmp_path / "a.cif", atoms, format="cif")
        parsed = reader.parse([(tmp_path / "a.cif").read_text()], ParseOptions())
        assert parsed.batch.tokens_of(0) == tokens
        d = parsed.batch.positions - positions
        assert np.abs(d - np.rint(d)).max() < 1e-8
        # ase writes 14 digits or so of edges and angles.
        assert np.abs(parsed.batch.cells[0] @ parsed.batch.cells[0].T - cell @ cell.T).max() < 1e-6


def test_what_is_written_is_what_is_read_after_a_second_round():
    for name, writer in WRITERS.items():
        for cell, positions, tokens in crystals(17, 20):
            first = read(name, writer(cell, positions, tokens, "x"))[1]
            text = writer(first.cells[0], first.positions, first.tokens_of(0), "x")
            second = read(name, text)[1]
            assert np.abs(second.positions - first.positions).max() < 1e-12
            assert np.abs(second.cells - first.cells).max() < 1e-11
