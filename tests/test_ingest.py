"""From files on disk to rows of the store: refusals by name, counts that add up, and structures that can be rebuilt."""

from __future__ import annotations

from collections import Counter
from pathlib import Path

import numpy as np

from lattice_census.ingest import classify

from . import strategies
from .broken_files import GOOD_CIF, broken_files
from .tables_of_structures import crystals, query, rows_of, text_of, write_csv
from .test_commands import census


def test_twenty_broken_files_beside_one_good_one(tmp_path: Path):
    """Each with a reason of its own, read by the command as a person would."""
    folder = tmp_path / "mixed"
    folder.mkdir()
    expected = {}
    for case in broken_files():
        suffix = Path(case.file).suffix
        if case.good == 0 and len(case.reasons) == 1 and suffix in (".cif", ".csv", ".xyz", ".vasp"):
            reason = case.reasons[0]
            if Counter(expected.values())[reason] < 2 and len(expected) < 24:
                name = f"{len(expected):02d}-{reason}{suffix}"
                (folder / name).write_bytes(case.content)
                expected[name] = reason
    close = strategies.cell_from_parameters(4, 4, 4, 90, 90, 90), np.array([[0, 0, 0], [0.05, 0, 0]]), ["Si", "Si"]
    (folder / "overlap.cif").write_text(text_of(close))
    expected["overlap.cif"] = "sites_overlap"
    (folder / "good.cif").write_text(GOOD_CIF)
    (folder / "notes.txt").write_text("not a structure, and not named as one\n")
    assert len(expected) >= 20 and len(set(expected.values())) >= 12

    run = ("ingest", "mixed", "--direct", "--workers", "1", "--quiet")
    done = census(*run, cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    store = tmp_path / "census.duckdb"
    assert dict(query(store, "SELECT file, reason FROM rejects")) == expected
    assert query(store, "SELECT file FROM records") == [("good.cif",)]
    assert query(store, "SELECT count(*) FROM files WHERE found <> accepted + rejected") == [(0,)]
    assert query(store, "SELECT found, accepted, rejected FROM files WHERE file = 'notes.txt'") == [(0, 0, 0)]
    assert query(store, "SELECT count(*) FROM rejects WHERE message = '' OR label = ''") == [(0,)]
    assert census(*run, "--recompute", "--fail-on", "rejects", cwd=tmp_path).returncode == 1


def test_a_record_that_breaks_is_refused_and_its_last_good_state_is_kept(tmp_path: Path, ingest):
    rows = rows_of(crystals(5))
    path = write_csv(tmp_path / "t.csv", rows)
    ingest(path)
    good = rows[2]["cif"]
    rows[2]["cif"] = "data_cut\n_cell_length_a 3\n"
    write_csv(path, rows)
    counts = ingest(path)
    assert (counts["rejected"], counts["missing"], counts["unchanged"]) == (1, 1, 4)
    store = tmp_path / "census.duckdb"
    assert query(store, "SELECT label, missing_since_run FROM records WHERE missing_since_run IS NOT NULL") == [
        ("m-00002", 2)
    ]
    rows[2]["cif"] = good
    write_csv(path, rows)
    counts = ingest(path)
    assert (counts["rejected"], counts["unchanged"]) == (0, 5)
    assert query(store, "SELECT count(*) FROM rejects") == [(0,)]


def test_the_given_structure_is_rebuilt_from_the_stored_row(tmp_path: Path, ingest):
    """given cell = matrix . reduced cell . rotation; given position . matrix = canonical position + shift + origin."""
    rng = np.random.default_rng(8)
    listed = [strategies.disguise(rng, c) for c in crystals(40, sites=3)]
    ingest(write_csv(tmp_path / "t.csv", rows_of(listed)))
    rows = query(
        tmp_path / "census.duckdb",
        "SELECT s.cell_angstrom, s.positions_fractional, s.species, c.cell_angstrom, c.positions_fractional, "
        "c.species, c.matrix, c.rotation, c.origin_fractional, c.site_map, c.site_shift, c.residual_angstrom, "
        "c.supercell_index "
        "FROM structures s JOIN crystals c USING (record_id)",
    )
    assert len(rows) == 40
    for (
        cell,
        positions,
        species,
        reduced,
        basis,
        tokens,
        matrix,
        rotation,
        origin,
        site_map,
        shift,
        residual,
        n,
    ) in rows:
        given, k, r = (np.array(a).reshape(3, 3) for a in (cell, matrix, rotation))
        lattice = np.array(reduced).reshape(3, 3)
        np.testing.assert_allclose(k @ lattice @ r, given, atol=1e-9)
        np.testing.assert_allclose(r @ r.T, np.eye(3), atol=1e-12)
        assert np.linalg.det(r) > 0 and round(abs(np.linalg.det(k))) == n
        placed = np.array(basis).reshape(-1, 3)[site_map] + np.array(shift).reshape(-1, 3) + np.array(origin)
        off = np.linalg.norm((np.array(positions).reshape(-1, 3) @ k - placed) @ lattice, axis=1)
        assert off.max() <= residual + 1e-9
        assert [tokens[i] for i in site_map] == species


def test_energies_are_brought_to_one_unit(tmp_path: Path, ingest):
    rows = rows_of(crystals(1, sites=4))
    rows[0]["energy_per_atom"] = -8.0
    values = {}
    for unit in ("eV", "eV/site", "Ha", "Ry", "kJ/mol"):
        path = write_csv(tmp_path / f"{unit.replace('/', '-')}.csv", rows)
        ingest(path, of_source={"energy_column": "energy_per_atom", "energy_unit": unit})
        found = query(tmp_path / "census.duckdb", "SELECT energy_ev_per_site FROM records WHERE file = ?", path.name)
        values[unit] = found[0][0]
    # 1 Ha = 27.211386 eV, 1 Ry = Ha / 2 (CODATA 2018, value from memory); 1 eV = 96.485332 kJ/mol (likewise).
    assert values["eV"] == -2.0 and values["eV/site"] == -8.0
    np.testing.assert_allclose([values["Ha"], values["Ry"], values["kJ/mol"]],
                               [-2 * 27.211386, -27.211386, -2 / 96.485332], rtol=1e-7)  # fmt: skip
    counts = ingest(write_csv(tmp_path / "none.csv", rows), of_source={"energy_column": "energy_per_atom"})
    assert counts["no_unit"] == ["none.csv"]
    assert query(tmp_path / "census.duckdb", "SELECT energy_ev_per_site FROM records WHERE file = 'none.csv'") == [
        (None,)
    ]


def test_types_do_not_depend_on_how_many_keys_are_read_at_once(tmp_path: Path, ingest, monkeypatch):
    path = write_csv(tmp_path / "t.csv", rows_of(crystals(13, sites=3)))
    whole, pieces = tmp_path / "whole.duckdb", tmp_path / "pieces.duckdb"
    ingest(path, store=whole)
    monkeypatch.setattr(classify, "READ_AT_ONCE", 5)
    ingest(path, store=pieces, chunk_records=2)
    types = "SELECT * FROM crystal_types ORDER BY crystal_key"
    assert len(query(whole, types)) == 13
    assert query(pieces, types) == query(whole, types)
