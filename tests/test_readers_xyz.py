"""Extended XYZ: frames, comment lines (against ase and the extxyz package), labels, layers."""

import io
import itertools

import ase.io
import extxyz
import numpy as np
import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named
from lattice_census.readers.comment_line import CommentError, comment_pairs, property_of

from . import strategies
from .broken_files import GOOD_FRAME, XYZ

reader = reader_named("extxyz")


def split(text, **options):
    return list(reader.split(io.BytesIO(text.encode()), "file", SplitOptions(**options)))


def one(text):
    parsed = reader.parse([text], ParseOptions())
    assert not parsed.refusals, parsed.refusals
    return parsed.batch


@pytest.mark.parametrize(
    ("line", "pairs"),
    [
        ("a=1 b=x", {"a": "1", "b": "x"}),
        ('a="x y" b="say \\"no\\"" c="back\\\\slash" d="line\\nline"',
         {"a": "x y", "b": 'say "no"', "c": "back\\slash", "d": "line\nline"}),
        ("a='x y'", {"a": "x y"}),
        ("flag a = 3", {"flag": "T", "a": "3"}),
        ("a=[1, 2] b=[[1,2],[3,4]] c={1 2}", {"a": "[1, 2]", "b": "[[1,2],[3,4]]", "c": "{1 2}"}),
        ('"odd key"=1', {"odd key": "1"}),
        ("", {}),
        ("a=1 a=2", {"a": "2"}),
    ],
)  # fmt: skip
def test_comment_lines(line, pairs):
    assert comment_pairs(line) == pairs


@pytest.mark.parametrize("line", ['a="x', "a=[1, 2", "a=", "]=3", "a={1"])
def test_comment_lines_that_break_the_grammar(line):
    with pytest.raises(CommentError):
        comment_pairs(line)


@pytest.mark.parametrize(
    ("text", "value"),
    [("1", 1), ("-1.5e-3", -0.0015), ("1.5d0", 1.5), ("T", True), ("false", False), ("x", "x"), ("1 2 3", "[1, 2, 3]"),
     ("[1, 2]", "[1, 2]"), ("[[1,2],[3,4.5]]", "[[1, 2], [3, 4.5]]"), ("{a b}", '["a", "b"]'), ("a b", "a b"),
     ("1e999", "1e999")],
)  # fmt: skip
def test_values(text, value):
    assert property_of(text) == value and type(property_of(text)) is type(value)


def test_values_are_those_of_the_extxyz_package(tmp_path):
    comment = f'{XYZ} e=1.5d0 n=3 flag=T no=F s="a b" w=_abc x=-2 y=1e-5'
    (tmp_path / "a.xyz").write_text(f"1\n{comment}\nSi 0 0 0\n")
    frame = next(iter(extxyz.iread_dicts(str(tmp_path / "a.xyz"), use_cextxyz=False)))
    (record,) = split(f"1\n{comment}\nSi 0 0 0\n")
    assert record.properties == frame.info
    assert np.allclose(one(record.text).cells[0], np.asarray(frame.cell).T)


@pytest.mark.parametrize(
    "lattice", ['"1 2 3 4 5 7 7 8 10"', "[[1, 4, 7], [2, 5, 8], [3, 7, 10]]", "{1 2 3 4 5 7 7 8 10}"]
)
def test_the_vectors_of_a_lattice(lattice):
    # The nested form is the matrix with the vectors as columns (source: documentation of the extxyz package).
    assert one(f"1\nLattice={lattice}\nSi 0 0 0\n").cells[0].tolist() == [[1, 2, 3], [4, 5, 7], [7, 8, 10]]


def test_labels_and_properties():
    text = GOOD_FRAME
    for pairs in ("label=a id=b", "id=007 name=x", 'name="n 1" config_name=c', "config_name=c energy=-1.5", "energy=2"):
        text += f"1\n{XYZ} {pairs}\nSi 0 0 0\n\n"
    records = split(text)
    assert [r.label for r in records] == ["file/1", "a", "007", "n 1", "c", "file/6"]
    assert [r.properties for r in records] == [
        {}, {"id": "b"}, {"name": "x"}, {"config_name": "c"}, {"energy": -1.5}, {"energy": 2}
    ]  # fmt: skip


def test_columns_in_any_order_and_unused_ones():
    text = f"2\n{XYZ.split()[0]} {' '.join(XYZ.split()[1:9])} Properties=forces:R:3:pos:R:3:tag:S:1:Z:I:1\n"
    text += "9 9 9 1 2 3 a 14\n9 9 9 0 0 0 b 8\n"
    batch = one(text)
    assert batch.tokens_of(0) == ["Si", "O"]
    assert np.allclose(batch.positions @ batch.cells[0], [[1, 2, 3], [0, 0, 0]])


def test_a_layer_has_its_aperiodic_direction_last():
    cell = np.array([[4, 0, 0], [1, 5, 0], [0, 1, 6.0]])
    cartesian = np.array([[0.5, 0.6, 0.7], [2, 2, 2]])
    rows = "".join(f"Si {a} {b} {c}\n" for a, b, c in cartesian)
    for at in range(3):
        pbc = " ".join("F" if i == at else "T" for i in range(3))
        lattice = " ".join(str(x) for x in cell.ravel())
        batch = one(f'2\nLattice="{lattice}" pbc="{pbc}"\n{rows}')
        assert batch.periodicity.tolist() == [2]
        assert np.array_equal(batch.cells[0][2], cell[at])
        assert np.linalg.det(batch.cells[0]) == pytest.approx(np.linalg.det(cell))
        assert np.allclose(batch.positions @ batch.cells[0], cartesian)


def test_a_layer_without_a_third_vector():
    batch = one('2\nLattice="4 0 0 0 0 0 1 5 0" pbc="T F T"\nSi 0 0 1\nSi 0 0 4\n')
    assert batch.periodicity.tolist() == [2]
    assert np.allclose(batch.positions @ batch.cells[0], [[0, 0, 1], [0, 0, 4]])
    # 10 angstrom more than twice its thickness, along its normal; the hand of the other two decides the sign.
    assert batch.cells[0][2].tolist() == [0, 0, -16]


def test_occupancy_column_makes_mixed_sites():
    batch = one(f"3\n{XYZ}:occupancy:R:1\nFe 0 0 0 0.5\nNi 0 0 0 0.5\nLi 1 1 1 0.25\n")
    assert batch.tokens_of(0) == ["Fe0.5Ni0.5", "Li0.25"]


def test_files_of_ase_and_of_the_extxyz_package(tmp_path):
    rng = np.random.default_rng(8)
    kinds = itertools.cycle(strategies.LATTICE_TYPES)
    crystals = [strategies.random_crystal(rng, next(kinds), int(rng.integers(1, 6))) for _ in range(200)]
    atoms = []
    for i, (cell, positions, tokens) in enumerate(crystals):
        a = ase.Atoms(tokens, cell=cell, scaled_positions=positions, pbc=True)
        a.info = {"energy_total": float(i) / 7, "label": f"L{i}"}
        a.arrays["forces_made_up"] = rng.random((len(tokens), 3))
        atoms.append(a)
    ase.io.write(tmp_path / "ase.extxyz", atoms, format="extxyz")
    frames = [
        extxyz.Frame(len(t), c.T, np.array([True] * 3), {"label": f"L{i}"}, {"species": np.array(t), "pos": p @ c})
        for i, (c, p, t) in enumerate(crystals)
    ]
    extxyz.write_dicts(str(tmp_path / "package.extxyz"), frames, use_cextxyz=False)
    for name, places in (("ase.extxyz", 8), ("package.extxyz", 6)):
        records = split((tmp_path / name).read_text())
        assert [r.label for r in records] == [f"L{i}" for i in range(200)]
        parsed = reader.parse([r.text for r in records], ParseOptions())
        assert len(parsed.rows) == 200
        for i, (cell, positions, tokens) in enumerate(crystals):
            assert parsed.batch.tokens_of(i) == tokens
            assert np.allclose(parsed.batch.cells[i], cell, atol=10.0**-places)
            moved = (parsed.batch.positions[parsed.batch.sites(i)] - positions) @ cell
            assert np.abs(moved).max() < 10.0 ** (1 - places)
    assert split((tmp_path / "ase.extxyz").read_text())[7].properties["energy_total"] == 1.0


def test_frames_are_cut_the_same_however_the_stream_is_cut():
    class Dribble(io.BytesIO):
        def read1(self, size=-1):
            return super().read(3)

    text = (GOOD_FRAME + "\n" + GOOD_FRAME.replace("\n", "\r\n") + "7\nx\n" + GOOD_FRAME).encode()
    whole = list(reader.split(io.BytesIO(text), "file", SplitOptions()))
    assert len(whole) == 4 and sum(r.refusal is not None for r in whole) == 1
    assert list(reader.split(Dribble(text), "file", SplitOptions())) == whole
