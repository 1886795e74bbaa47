"""CIF: cutting at blocks, cell, coordinates, species, occupancies, and symmetry against spglib, ase and gemmi."""

import io
import pathlib
import warnings

import numpy as np
import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named

pytestmark = pytest.mark.filterwarnings("ignore:Set OLD_ERROR_HANDLING:DeprecationWarning")

CELL = (
    "_cell_length_a 4\n_cell_length_b 5\n_cell_length_c 6\n_cell_angle_alpha 90\n_cell_angle_beta 90\n"
    "_cell_angle_gamma 90\n"
)
CUBE = CELL.replace("_b 5", "_b 4").replace("_c 6", "_c 4")
HEXAGON = CELL.replace("_b 5", "_b 4").replace("gamma 90", "gamma 120")
SITES = "loop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
TYPED = SITES.replace("_atom_site_fract_x", "_atom_site_type_symbol\n_atom_site_fract_x")
FILLED = SITES + "_atom_site_occupancy\n"
OPERATIONS = "loop_\n_space_group_symop_operation_xyz\n"

reader = reader_named("cif")


def split(data, stem="file", **options):
    return list(
        reader.split(io.BytesIO(data if isinstance(data, bytes) else data.encode()), stem, SplitOptions(**options))
    )


def parse(text, max_sites=1000):
    return reader.parse([text], ParseOptions(max_sites))


def crystal(text, max_sites=1000):
    parsed = parse(text, max_sites)
    assert not parsed.refusals, parsed.refusals
    return parsed.batch.cells[0], parsed.batch.positions, parsed.batch.tokens_of(0)


def reason(text, max_sites=1000):
    parsed = parse(text, max_sites)
    assert len(parsed.rows) == 0
    ((row, refusal),) = parsed.refusals
    assert row == 0 and refusal.message
    return refusal.reason


# ---- cutting


def test_one_block_has_the_stem_and_several_have_their_names():
    one = f"# made up\n\ndata_anything\n{CELL}{SITES}Si1 0 0 0\n"
    assert [r.label for r in split(one)] == ["file"]
    assert [r.label for r in split(one + one.replace("anything", "B"))] == ["file/anything", "file/B"]


def test_a_block_begins_outside_text_fields_in_any_case():
    text = f"DATA_a\n{CELL}_note\n;\ndata_not_here\n _cell_length_a 3\n;\n{SITES}Si1 0 0 0\n"
    text += f"  Data_b\n{CELL}{SITES}O1 0 0 0\n"
    records = split(text)
    assert [r.label for r in records] == ["file/a", "file/b"]
    assert "data_not_here" in records[0].text
    assert [crystal(r.text)[2] for r in records] == [["Si"], ["O"]]


def test_blocks_without_structure_are_passed_over_beside_others():
    text = f"data_global\n_publ 'x'\ndata_a\n{CELL}{SITES}Si1 0 0 0\ndata_end\n_x 1\n"
    assert [r.label for r in split(text)] == ["file/a"]
    assert [r.label for r in split("data_global\n_publ 'x'\ndata_more\n_x 1\n")] == ["file/more"]
    assert [r.label for r in split("data_only\n_x 1\n")] == ["file"]
    assert len(split("")) == 1 and split("")[0].refusal.reason == "text_unreadable"
    assert len(split("# nothing\n")) == 1


def test_blocks_are_cut_the_same_however_the_stream_is_cut():
    class Dribble(io.RawIOBase):
        def __init__(self, data, step):
            self.data, self.step = data, step

        def readable(self):
            return True

        def readinto(self, buffer):
            part, self.data = self.data[: self.step], self.data[self.step :]
            buffer[: len(part)] = part
            return len(part)

    text = "".join(f"data_b{i}\r\n{CELL}_t\n;\ndata_x\n;\n{SITES}Si1 0 0 0.{i}\n" for i in range(5)).encode()
    whole = split(text)
    assert len(whole) == 5
    for step in (1, 7, 64):
        assert list(reader.split(io.BufferedReader(Dribble(text, step), 16), "file", SplitOptions())) == whole


def test_line_ends_of_carriage_returns_alone_are_read():
    text = f"data_a\n{CELL}{SITES}Si1 0 0 0\ndata_b\n{CELL}{SITES}O1 0 0 0\n".replace("\n", "\r")
    assert [crystal(r.text)[2] for r in split(text)] == [["Si"], ["O"]]


def test_bytes_that_are_not_utf8_are_prose():
    text = f"data_a\n_author 'M\xfcller'\n{CELL}{SITES}Si1 0 0 0\n".encode("latin-1")
    (record,) = split(text)
    assert "Müller" in record.text and crystal(record.text)[2] == ["Si"]


def test_a_block_too_long_is_refused_and_the_next_is_read():
    text = f"data_a\n{CELL}{SITES}" + "Si1 0 0 0\n" * 2000 + f"data_b\n{CELL}{SITES}O1 0 0 0\n"
    records = split(text, max_text_bytes=5000)
    assert [r.label for r in records] == ["file/a", "file/b"]
    assert records[0].text is None and records[0].refusal.reason == "text_too_long"
    assert crystal(records[1].text)[2] == ["O"]


# ---- cell and coordinates


def test_values_with_uncertainties_quotes_and_dots():
    cell, positions, tokens = crystal(
        "data_a\n_cell.length_a 4.0(1)\n_cell.length_b '5'\n_cell.length_c 6.\n_cell.angle_alpha 90.0\n"
        "_cell.angle_beta 90\n_cell.angle_gamma 90(3)\nloop_\n_atom_site.label\n_atom_site.fract_x\n"
        "_atom_site.fract_y\n_atom_site.fract_z\nSi1 0.25(3) -.5 1e-1\n"
    )
    assert np.array_equal(cell, np.diag([4.0, 5, 6]))
    assert np.array_equal(positions, [[0.25, -0.5, 0.1]])


def test_one_site_without_a_loop():
    text = (
        "data_a\n" + CELL + "_atom_site_label Si1\n_atom_site_fract_x 0\n_atom_site_fract_y 0.5\n_atom_site_fract_z 0\n"
    )
    assert crystal(text)[1].tolist() == [[0, 0.5, 0]]


def test_cartesian_coordinates_are_converted():
    sites = SITES.replace("fract", "Cartn")
    cell, positions, _ = crystal(f"data_a\n{HEXAGON}{sites}Si1 1 1 1.5\n")
    assert np.allclose(positions @ cell, [[1, 1, 1.5]], atol=1e-12)
    own = "_atom_sites_Cartn_tran_matrix_11 1\n"
    assert reason(f"data_a\n{HEXAGON}{own}{sites}Si1 1 1 1.5\n") == "coordinates_missing"


def test_cells_agree_with_gemmi():
    import gemmi

    rng = np.random.default_rng(4)
    for _ in range(50):
        parameters = [*rng.uniform(2, 20, 3), *rng.uniform(70, 110, 3)]
        tags = [line.split()[0] for line in CELL.splitlines()]
        text = "data_a\n" + "".join(f"{t} {v!r}\n" for t, v in zip(tags, map(float, parameters), strict=True))
        cell = crystal(text + SITES + "Si1 0 0 0\n")[0]
        expected = np.array(gemmi.UnitCell(*parameters).orth.mat.tolist()).T
        assert np.allclose(cell, expected, atol=1e-10)


@pytest.mark.parametrize(
    ("types", "tokens"),
    [("Fe3+", ["Fe"]), ("FE", ["Fe"]), ("O2-", ["O"]), ("D", ["H"]), ("T", ["H"]), ("'Cl1-'", ["Cl"]), ("?", ["Si"])],
)
def test_type_symbols(types, tokens):
    assert crystal(f"data_a\n{CELL}{TYPED}Si1 {types} 0 0 0\n")[2] == tokens


@pytest.mark.parametrize(
    ("label", "token"),
    [("Fe1", "Fe"), ("FE1", "Fe"), ("O1W", "O"), ("OH1", "O"), ("CaM2", "Ca"), ("D1", "H"), ("Si", "Si"), ("O-H", "O")],
)
def test_labels_name_the_element_where_no_type_does(label, token):
    assert crystal(f"data_a\n{CELL}{SITES}{label} 0 0 0\n")[2] == [token]


@pytest.mark.parametrize("label", ["Wat", "Vac1", "T1", "M1", "X", "?", "Ow1", "Q2", "1Fe"])
def test_labels_that_name_no_element(label):
    assert reason(f"data_a\n{CELL}{SITES}{label} 0 0 0\n") == "species_unknown"


def test_dummy_sites_are_left_out():
    sites = TYPED + "_atom_site_calc_flag\n"
    assert crystal(f"data_a\n{CELL}{sites}Si1 Si 0 0 0 d\nX1 X ? ? ? dum\n")[2] == ["Si"]
    assert crystal(f"data_a\n{CELL}{TYPED}Si1 Si 0 0 0\n. . 0.5 0.5 0.5\n")[2] == ["Si"]
    assert reason(f"data_a\n{CELL}{sites}X1 X ? ? ? dum\n") == "sites_missing"


def test_mixed_sites():
    rows = "Fe1 0 0 0 0.5\nNi1 0 0.001 1 0.5\nLi1 .5 .5 .5 0.25\nO1 .5 0 0 1\n"
    _, positions, tokens = crystal(f"data_a\n{CELL}{FILLED}{rows}")
    assert tokens == ["Fe0.5Ni0.5", "Li0.25", "O"]
    assert positions[0].tolist() == [0, 0, 0]
    # 0.02 angstrom apart: two sites.
    assert crystal(f"data_a\n{CELL}{FILLED}Fe1 0 0 0 0.5\nNi1 0 0.004 0 0.5\n")[2] == ["Fe0.5", "Ni0.5"]
    # A full duplicate stays, to be refused as an overlap by the stage that measures distances.
    assert crystal(f"data_a\n{CELL}{FILLED}Fe1 0 0 0 1\nFe2 0 0 0 1\n")[2] == ["Fe", "Fe"]
    assert crystal(f"data_a\n{CELL}{FILLED}Fe1 0 0 0 .\nFe2 0.5 0 0 ?\n")[2] == ["Fe", "Fe"]


# ---- symmetry


def test_listed_operations_are_authoritative_also_in_unusual_settings():
    # A face-centred cell of a monoclinic group: no table has it.
    listed = OPERATIONS + "x,y,z\n'x+1/2, y+1/2, z'\nx+1/2,y,z+1/2\nx,y+1/2,z+1/2\n-x,y,-z\n'-x+.5, y+.5, -z'\n"
    listed += "-x+1/2,y,-z+1/2\n-x,y+1/2,-z+1/2\n"
    name = "_space_group_name_H-M_alt 'P 1'\n"
    assert len(crystal(f"data_a\n{CELL}{name}{listed}{SITES}Si1 0.1 0.2 0.3\n")[2]) == 8
    assert len(crystal(f"data_a\n{CELL}{name}{listed}{SITES}Si1 0 0.2 0\n")[2]) == 4


def test_a_translation_that_tables_do_not_know():
    listed = OPERATIONS + "x,y,z\nx+1/5,y,z\nx+2/5,y,z\nx+0.6,y,z\nx+0.8,y,z\n"
    _, positions, _ = crystal(f"data_a\n{CELL}{listed}{SITES}Si1 0 0 0\n")
    assert np.allclose(np.sort(positions[:, 0]), np.arange(5) / 5)


@pytest.mark.parametrize(
    "operations", ["x,y", "x,y,q", "x,y,z\n-x,-y\n", "x,y,z\n-y,x,z\n", "x,y,z\nx,y,x\n", "x,y,z\n2x,y,z\n", "x y z"]
)
def test_operations_that_cannot_be_meant(operations):
    assert reason(f"data_a\n{CELL}{OPERATIONS}{operations}\n{SITES}Si1 0 0 0\n") == "symmetry_unreadable"


@pytest.mark.parametrize(
    ("statement", "cell", "general"),
    [
        ("_space_group_name_Hall '-P 2ybc'", CELL, 4),
        ("_symmetry_space_group_name_H-M 'P 21/c'", CELL, 4),
        ("_symmetry_space_group_name_H-M 'P 1 21/c 1'", CELL, 4),
        ("_space_group_name_H-M_alt 'P b n m'", CELL, 8),
        ("_space_group_name_H-M_alt Fm-3m", CUBE, 192),
        ("_space_group_name_H-M_alt 'F d -3 m:1'", CUBE, 192),
        ("_space_group_name_H-M_alt 'F d -3 m Z'", CUBE, 192),
        ("_space_group_name_H-M_alt 'F d -3 m'\n_space_group_IT_coordinate_system_code 2", CUBE, 192),
        ("_space_group_name_H-M_alt 'R -3 m'", HEXAGON, 36),
        ("_space_group_name_H-M_alt 'R -3 m H'", HEXAGON, 36),
        ("_space_group_IT_number 225", CUBE, 192),
        ("_space_group_IT_number 166", HEXAGON, 36),
        ("_space_group_name_H-M_alt 'nonsense'\n_space_group_IT_number 2", CELL, 2),
        ("_space_group_name_H-M_alt ?\n_space_group_IT_number .", CELL, 1),
        ("", CELL, 1),
    ],
)
def test_names_and_numbers(statement, cell, general):
    tokens = crystal(f"data_a\n{cell}{statement}\n{SITES}Si1 0.08 0.21 0.36\n")[2]
    assert len(tokens) == general


@pytest.mark.parametrize(
    ("statement", "cell"),
    [
        ("_space_group_name_H-M_alt 'nonsense'", CELL),
        ("_space_group_name_Hall 'nonsense'", CELL),
        ("_space_group_IT_number 231", CELL),
        ("_space_group_IT_number x", CELL),
        ("_space_group_name_H-M_alt 'F d -3 m'", CUBE),  # two origins, none said
        ("_space_group_name_H-M_alt 'F m -3 m'", CELL),  # does not fit the cell
        ("_space_group_name_H-M_alt 'P 63/m m c'", CUBE),
        ("loop_\n_space_group_symop_magn_operation.xyz\nx,y,z,+1\n-x,-y,-z,-1", CELL),
    ],
)
def test_symmetry_is_never_silently_dropped(statement, cell):
    assert reason(f"data_a\n{cell}{statement}\n{SITES}Si1 0 0 0\n") == "symmetry_unreadable"


@pytest.mark.parametrize("digits", [2, 3, 4, 5, 8])
def test_special_positions_given_with_few_digits(digits):
    # Positions of P 63/m m c (194), multiplicities from International Tables A: 2a 0,0,0; 2c 1/3,2/3,1/4; 6h x,2x,1/4;
    # 12k x,2x,z.
    third = f"{1 / 3:.{digits}f} {2 / 3:.{digits}f}"
    rows = f"Mg1 0 0 0\nSi1 {third} 0.25\nO1 0.17 0.34 0.25\nAl1 0.10 0.20 0.05\n"
    cell = HEXAGON.replace("a 4", "a 5").replace("b 4", "b 5").replace("c 6", "c 8.5")
    _, positions, tokens = crystal(f"data_a\n{cell}_space_group_name_H-M_alt 'P 63/m m c'\n{SITES}{rows}")
    assert [tokens.count(t) for t in ("Mg", "Si", "O", "Al")] == [2, 2, 6, 12]
    si = positions[[i for i, t in enumerate(tokens) if t == "Si"]]
    assert np.allclose(np.sort(si[:, 0] % 1), [1 / 3, 2 / 3], atol=1e-12)


def test_images_of_a_mixed_site():
    text = f"data_a\n{CUBE}_space_group_name_H-M_alt 'F m -3 m'\n{FILLED}Fe1 0 0 0 0.5\nNi1 0 0 0 0.5\nO1 .5 .5 .5 1\n"
    assert sorted(crystal(text)[2]) == ["Fe0.5Ni0.5"] * 4 + ["O"] * 4


def test_a_site_split_about_a_mirror_is_not_drawn_together():
    listed = OPERATIONS + "x,y,z\nx,y,-z\n"
    half = crystal(f"data_a\n{CELL}{listed}{FILLED}Fe1 0 0 0.005 0.5\n")
    full = crystal(f"data_a\n{CELL}{listed}{FILLED}Fe1 0 0 0.005 1\n")
    assert half[2] == ["Fe0.5", "Fe0.5"]
    assert full[2] == ["Fe"] and full[1].tolist() == [[0, 0, 0]]


def test_the_count_is_held_after_expansion():
    text = f"data_a\n{CUBE}_space_group_name_H-M_alt 'F m -3 m'\n{SITES}Si1 0.08 0.21 0.36\n"
    assert reason(text, max_sites=191) == "sites_too_many"
    assert len(crystal(text, max_sites=192)[2]) == 192
    rows = "".join(f"Si{i} 0.1 0.2 {i / 1000}\n" for i in range(900))
    assert reason(f"data_a\n{CUBE}_space_group_name_H-M_alt 'F m -3 m'\n{SITES}{rows}") == "sites_too_many"


def test_all_settings_of_the_tables_expand_like_spglib():
    """Counts and positions for a general and a special site in all 530 settings (source: spglib's database)."""
    import spglib

    cell = np.diag([7.0, 7.0, 7.0])
    for hall_number in range(1, 531):
        symmetry = spglib.get_symmetry_from_database(hall_number)
        triplets = []
        for rotation, shift in zip(symmetry["rotations"], symmetry["translations"], strict=True):
            parts = [
                "".join(f"{'-' if c < 0 else '+'}{v}" for c, v in zip(row, "xyz", strict=True) if c) for row in rotation
            ]
            triplets.append("'" + ", ".join(f"{p}+{round(s * 24)}/24" for p, s in zip(parts, shift, strict=True)) + "'")
        site = np.array([0.1234, 0.2713, 0.4177])
        images = site @ symmetry["rotations"].transpose(0, 2, 1) + symmetry["translations"]
        sites = "Si1 0.1234 0.2713 0.4177\n"
        text = f"data_a\n{CUBE.replace(' 4', ' 7')}{OPERATIONS}{chr(10).join(triplets)}\n{SITES}{sites}"
        found, positions, tokens = crystal(text)
        assert np.allclose(found, cell)
        d = positions[:, None] - images[None]
        assert len(tokens) == len(images) and (np.abs(d - np.rint(d)).max(axis=2) < 1e-9).any(axis=0).all()


def test_real_files_expand_to_the_sites_that_ase_and_gemmi_find():
    """The CIF files of the `crystals` package, with names, settings and few-digit special positions of all kinds."""
    import ase.io
    import crystals
    import gemmi

    files = sorted((pathlib.Path(crystals.__file__).parent / "cifs").glob("*.cif"))
    assert len(files) > 80
    for file in files:
        (record,) = split(file.read_bytes(), file.stem)
        cell, positions, tokens = crystal(record.text)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            atoms = ase.io.read(file)
        small = gemmi.make_small_structure_from_block(gemmi.cif.read_file(str(file)).sole_block())
        assert len(tokens) == len(atoms) == len(small.get_all_unit_cell_sites()), file.name
        assert record.label == file.stem
        assert sorted(tokens) == sorted(s.element.name for s in small.get_all_unit_cell_sites()), file.name
        # The same points: every site of ase lies within the rounding of the file of one of ours.
        d = atoms.get_scaled_positions()[:, None] - positions[None]
        distance = np.linalg.norm((d - np.rint(d)) @ cell, axis=2)
        assert distance.min(axis=1).max() < 0.05, file.name


def test_real_files_keep_their_space_group():
    """spglib finds, in what is read, at least the symmetry that the file states (by number, where it states one)."""
    import crystals
    import gemmi
    import spglib

    seen = 0
    for file in sorted((pathlib.Path(crystals.__file__).parent / "cifs").glob("*.cif")):
        block = gemmi.cif.read_file(str(file)).sole_block()
        stated = block.find_value("_space_group_IT_number") or block.find_value("_symmetry_Int_Tables_number")
        if not stated or not stated.isdigit():
            continue
        cell, positions, tokens = crystal(file.read_text(errors="replace"))
        numbers = [sorted(set(tokens)).index(t) + 1 for t in tokens]
        dataset = spglib.get_symmetry_dataset((cell, positions, numbers), symprec=1e-3)
        if dataset is not None:
            seen += 1
            assert dataset.number == int(stated), file.name
    assert seen > 60


def test_nothing_in_a_text_raises():
    """Random damage to a good text is a crystal or a refusal, never an exception."""
    rng = np.random.default_rng(6)
    good = f"data_a\n{CUBE}_space_group_name_H-M_alt 'F m -3 m'\n{FILLED}Fe1 0 0 0 0.5\nNi1 0 0 0 0.5\nO1 .5 .5 .5 1\n"
    texts = []
    for _ in range(400):
        chars = list(good)
        for _ in range(rng.integers(1, 3)):
            at = int(rng.integers(len(chars)))
            kind = rng.integers(3)
            if kind == 0:
                del chars[at : at + int(rng.integers(1, 20))]
            elif kind == 1:
                chars[at] = chr(int(rng.choice([0, 10, 34, 39, 45, 46, 59, 63, 95, 101, 105, 255, 0x2028, 0xD800])))
            else:
                chars.insert(at, str(rng.choice(["nan", "inf", "1e999", "data_", "loop_", "?", "-", "1_0"])))
        texts.append("".join(chars))
    parsed = reader.parse(texts, ParseOptions())
    rows = sorted([*parsed.rows.tolist(), *(r for r, _ in parsed.refusals)])
    assert rows == list(range(len(texts))) and len(parsed.rows) > 20 and len(parsed.refusals) > 20
    assert np.isfinite(parsed.batch.positions).all() and np.isfinite(parsed.batch.cells).all()
