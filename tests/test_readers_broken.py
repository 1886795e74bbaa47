"""Every broken file gives its named refusals, and good records beside them are read."""

from collections import defaultdict

import numpy as np
import pytest

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.model.refusals import REASONS
from lattice_census.readers import reader_named
from lattice_census.readers.archives import open_records

from .broken_files import GOOD_CIF, GOOD_ENTRY, GOOD_FRAME, GOOD_ROW, HEADER, POSCAR, Broken, broken_files

CASES = broken_files()


def outcome(path, name, options=None):
    """(labels of crystals, (label, reason) of refusals, in order; number of raw records)."""
    found = list(open_records(path, name, options or SplitOptions(), explicit=True))
    refused = {i: f.record.refusal for i, f in enumerate(found) if f.record.refusal is not None}
    by_reader = defaultdict(list)
    for i, f in enumerate(found):
        if i not in refused:
            by_reader[f.reader].append(i)
    accepted = []
    for reader, rows in by_reader.items():
        parsed = reader_named(reader).parse([found[i].record.text for i in rows], ParseOptions())
        assert len(parsed.rows) == len(parsed.batch) == len(parsed.properties)
        assert sorted([*parsed.rows.tolist(), *(r for r, _ in parsed.refusals)]) == list(range(len(rows)))
        assert np.isfinite(parsed.batch.cells).all() and np.isfinite(parsed.batch.positions).all()
        accepted += [rows[r] for r in parsed.rows]
        refused.update({rows[r]: refusal for r, refusal in parsed.refusals})
    return sorted(accepted), [refused[i] for i in sorted(refused)], found


def test_there_are_enough_of_them():
    assert len(CASES) >= 40
    assert len({c.file.rsplit(".", 1)[-1] for c in CASES}) >= 8


@pytest.mark.parametrize("case", CASES, ids=lambda c: c.id)
def test_a_broken_file_gives_its_refusals_and_no_others(case: Broken, tmp_path):
    path = tmp_path / case.file
    path.write_bytes(case.content)
    (tmp_path / "good.cif").write_text(GOOD_CIF)
    accepted, refusals, found = outcome(path, case.file)
    assert [r.reason for r in refusals] == list(case.reasons), refusals
    assert len(accepted) == case.good
    # found = accepted + refused
    assert len(found) == case.good + len(case.reasons)
    assert all(r.message and "\0" not in r.message for r in refusals)
    assert all(f.record.label for f in found)
    # The good file beside it.
    assert len(outcome(tmp_path / "good.cif", "good.cif")[0]) == 1
    # Nothing is written beside the input.
    assert sorted(p.name for p in tmp_path.iterdir()) == sorted([case.file, "good.cif"])


def test_every_reason_that_a_reader_can_give_is_provoked():
    provoked = {reason for case in CASES for reason in case.reasons}
    # These are found by later stages: the distances between sites, the heights of a layer (test_layer_form.py), and the
    # cell reduction.
    assert provoked == set(REASONS) - {"sites_overlap", "layer_unclear", "reduction_failed"}


def test_a_file_that_cannot_be_opened_is_refused(tmp_path):
    accepted, refusals, _ = outcome(tmp_path / "gone.cif", "gone.cif")
    assert not accepted and [r.reason for r in refusals] == ["file_unreadable"]
    (tmp_path / "folder.csv").mkdir()
    assert [r.reason for r in outcome(tmp_path / "folder.csv", "folder.csv")[1]] == ["file_unreadable"]


def test_a_text_of_ten_to_the_eleventh_power_costs_no_memory(tmp_path):
    import tracemalloc

    path = tmp_path / "count.extxyz"
    path.write_text('100000000000\nLattice="4 0 0 0 4 0 0 0 4"\nSi 0 0 0\n')
    tracemalloc.start()
    assert [r.reason for r in outcome(path, path.name)[1]] == ["sites_too_many"]
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 3_000_000


WHOLE = {
    "a.cif": GOOD_CIF.encode() * 3,
    "a.csv": b"id,cif\n" + GOOD_ROW.encode() * 3,
    "a.extxyz": GOOD_FRAME.encode() * 3,
    "a.jsonl": HEADER + GOOD_ENTRY * 3,
    "a.json": b'{"data": [' + GOOD_ENTRY + b"," + GOOD_ENTRY + b"]}",
    "POSCAR": POSCAR.encode(),
}


@pytest.mark.parametrize("name", WHOLE)
def test_random_damage_never_raises(name, tmp_path):
    """Every raw record of a damaged file is a crystal or a refusal: `outcome` checks that."""
    rng = np.random.default_rng(20)
    pieces = [
        b"\0",
        b"\xff",
        b"\n",
        b'"',
        b"nan",
        b"1e999",
        b"-",
        b"9" * 5000,
        b"{",
        b"[",
        b"data_",
        b";",
        b"\r",
        b"=",
        b",",
    ]
    for _ in range(120):
        data = bytearray(WHOLE[name])
        for _ in range(rng.integers(1, 4)):
            at = int(rng.integers(len(data)))
            if rng.random() < 0.5:
                del data[at : at + int(rng.integers(1, 40))]
            else:
                data[at:at] = pieces[rng.integers(len(pieces))]
        (tmp_path / name).write_bytes(data)
        _, refusals, found = outcome(tmp_path / name, name)
        assert all(r.reason in REASONS for r in refusals)
        assert all(f.record.label and "\0" not in f.record.label for f in found)
