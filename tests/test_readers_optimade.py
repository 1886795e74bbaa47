"""OPTIMADE entries: JSON lines, API pages, partly filled sites, layers. Source: OPTIMADE specification 1.2."""

import io
import json

import numpy as np

from lattice_census.model.raw import ParseOptions, SplitOptions
from lattice_census.readers import reader_named

from .broken_files import HEADER

reader = reader_named("optimade")

ATTRIBUTES = {
    "lattice_vectors": [[4, 0, 0], [1, 5, 0], [0, 0, 6]],
    "cartesian_site_positions": [[0, 0, 0], [2, 2, 3]],
    "species_at_sites": ["A", "O"],
    "species": [
        {"name": "A", "chemical_symbols": ["Ni", "Fe"], "concentration": [0.25, 0.75]},
        {"name": "O", "chemical_symbols": ["O"], "concentration": [1.0], "mass": [15.999]},
        {"name": "unused", "chemical_symbols": ["X"], "concentration": [1.0]},
    ],
    "dimension_types": [1, 1, 1],
    "nsites": 2,
    "chemical_formula_reduced": "Fe3NiO4",
    "elements": ["Fe", "Ni", "O"],
    "_made_up_energy": -1.25,
    "last_modified": None,
}


def entry(name, **changes):
    return {"id": name, "type": "structures", "attributes": {**ATTRIBUTES, **changes}}


def split(data, **options):
    return list(reader.split(io.BytesIO(data), "file", SplitOptions(**options)))


def parse(records):
    parsed = reader.parse([r.text for r in records], ParseOptions())
    assert not parsed.refusals, parsed.refusals
    return parsed.batch


def test_lines_pages_and_lists_of_pages_hold_the_same_entries():
    entries = [entry("a/1"), entry("b")]
    lines = HEADER + b'{"type": "info", "id": "structures", "properties": {}}\n\n'
    lines += b"\n".join(json.dumps(e).encode() for e in entries)
    lines += b'\n{"type": "references", "id": "r", "attributes": {}}\n'
    page = {"data": entries, "meta": {"api_version": "1.2.0"}}
    variants = [
        lines,
        lines.removeprefix(HEADER),
        json.dumps(page).encode(),
        json.dumps(page, indent=2).encode(),
        json.dumps([{"data": entries[:1]}, {"data": entries[1]}], indent=1).encode(),
        b"\n".join(json.dumps({"data": [e]}).encode() for e in entries),
    ]
    expected = split(variants[0])
    assert [r.label for r in expected] == ["a/1", "b"]
    assert expected[0].properties == {
        "chemical_formula_reduced": "Fe3NiO4", "elements": '["Fe", "Ni", "O"]', "_made_up_energy": -1.25,
        "last_modified": None,
    }  # fmt: skip
    for variant in variants[1:]:
        assert split(variant) == expected
    batch = parse(expected)
    assert batch.tokens_of(0) == batch.tokens_of(1) == ["Fe0.75Ni0.25", "O"]
    assert np.allclose(batch.positions[:2] @ batch.cells[0], ATTRIBUTES["cartesian_site_positions"])


def test_vacancies_make_partly_filled_sites():
    species = [
        {"name": "A", "chemical_symbols": ["Li", "vacancy"], "concentration": [0.5, 0.5]},
        {"name": "O", "chemical_symbols": ["vacancy"], "concentration": [1.0]},
    ]
    assert parse(split(json.dumps(entry("v", species=species)).encode())).tokens_of(0) == ["Li0.5"]


def test_fractional_positions_where_there_are_no_cartesian_ones():
    changes = {"cartesian_site_positions": None, "fractional_site_positions": [[0, 0, 0], [0.25, 0.5, 0.75]]}
    assert parse(split(json.dumps(entry("f", **changes)).encode())).positions.tolist() == [[0, 0, 0], [0.25, 0.5, 0.75]]


def test_layers():
    vectors = [[4, 0, 0], [None, None, None], [1, 0, 5]]
    batch = parse(split(json.dumps(entry("l", dimension_types=[1, 0, 1], lattice_vectors=vectors)).encode()))
    assert batch.periodicity.tolist() == [2]
    assert np.allclose(batch.cells[0][:2], [[1, 0, 5], [4, 0, 0]]) and np.linalg.det(batch.cells[0]) > 0
    assert np.allclose(batch.positions @ batch.cells[0], ATTRIBUTES["cartesian_site_positions"])


def test_a_file_of_nothing_has_no_records():
    assert split(HEADER) == [] and split(b'{"data": []}') == []


def test_an_entry_too_long_is_refused_and_the_next_is_read():
    long = entry("long", cartesian_site_positions=[[0.123456789, 0, 0]] * 5000)
    records = split(HEADER + json.dumps(long).encode() + b"\n" + json.dumps(entry("b")).encode(), max_text_bytes=20_000)
    assert [r.label for r in records] == ["long", "b"]
    assert records[0].refusal.reason == "text_too_long" and records[1].refusal is None
