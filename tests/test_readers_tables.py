"""Tables: columns, labels, values, and structure texts of several formats in one column."""

import csv
import io
import json

import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from lattice_census.model.raw import FileRefused, ParseOptions, SplitOptions
from lattice_census.readers import reader_named
from lattice_census.readers.tables import typed

from .broken_files import GOOD_CIF, GOOD_FRAME, POSCAR


def split(name, data, **options):
    return list(reader_named(name).split(io.BytesIO(data), "stem", SplitOptions(**options)))


def csv_bytes(rows, delimiter=","):
    out = io.StringIO(newline="")
    csv.writer(out, delimiter=delimiter, lineterminator="\n").writerows(rows)
    return out.getvalue().encode()


def test_columns_labels_and_values():
    rows = [["", "material_id", "cif", "energy", "n", "tag", "zip"], ["7", "m-1", GOOD_CIF, "-1.50", "3", "", "0012"]]
    (record,) = split("csv", csv_bytes(rows))
    assert record.label == "m-1" and record.text == GOOD_CIF
    assert record.properties == {"": 7, "energy": -1.5, "n": 3, "tag": None, "zip": "0012"}
    assert isinstance(record.properties["n"], int)


@pytest.mark.parametrize(
    ("columns", "options", "label"),
    [
        (["name", "label", "material_id", "id"], {}, "v3"),
        (["name", "label", "material_id"], {}, "v2"),
        (["name", "label"], {}, "v1"),
        (["name"], {}, "v0"),
        (["other"], {}, "row 1"),
        (["id", "other"], {"id_column": "other"}, "v1"),
    ],
)
def test_which_column_names_a_record(columns, options, label):
    rows = [[*columns, "cif"], [*(f"v{i}" for i in range(len(columns))), "x"]]
    assert split("csv", csv_bytes(rows), **options)[0].label == label
    line = json.dumps(dict(zip(rows[0], rows[1], strict=True))).encode()
    assert split("jsonl", line, **options)[0].label == label


def test_which_column_holds_the_structure():
    rows = [["structure", "cif", "text"], ["s", "c", "t"]]
    assert split("csv", csv_bytes(rows))[0].text == "c"
    assert split("csv", csv_bytes([r[::2] for r in rows]))[0].text == "s"
    assert split("csv", csv_bytes(rows), structure_column="text")[0].text == "t"


@pytest.mark.parametrize("options", [{"id_column": "gone"}, {"structure_column": "gone"}])
def test_a_named_column_that_is_not_there_is_refused_with_those_that_are(options):
    rows = [["a", "b", "cif"], ["1", "2", "x"]]
    table = pa.table({"a": [1], "b": [2], "cif": ["x"]})
    buffer = io.BytesIO()
    pq.write_table(table, buffer)
    for name, data in (("csv", csv_bytes(rows)), ("jsonl", b'{"a":1,"b":2,"cif":"x"}'), ("parquet", buffer.getvalue())):
        with pytest.raises(FileRefused) as refused:
            split(name, data, **options)
        assert all(c in refused.value.refusal.message for c in ("'gone'", "'a'", "'b'", "'cif'"))


def test_rows_are_numbered_from_one_where_nothing_names_them():
    data = csv_bytes([["cif"], ["x"], ["y"]])
    assert [r.label for r in split("csv", data)] == ["row 1", "row 2"]
    assert [r.label for r in split("csv", csv_bytes([["id", "cif"], ["", "x"], ["k", "y"]]))] == ["row 1", "k"]


def test_quoted_texts_come_out_as_they_went_in():
    texts = ['a "quoted" word', "line\nline\r\nline", ",;\t", '"', '""', "\n", "  kept  ", "é\u2028x"]
    rows = [["id", "cif", "note"], *([str(i), t, t] for i, t in enumerate(texts))]
    for delimiter in ",;\t":
        records = split("csv", csv_bytes(rows, delimiter))
        assert [r.text for r in records] == texts
        assert [r.properties["note"] for r in records] == texts


def test_a_csv_is_read_as_polars_reads_it():
    frame = pl.DataFrame({
        "id": [f"r{i}" for i in range(300)],
        "cif": [GOOD_CIF.replace("good", f"g{i}") for i in range(300)],
        "e": [i / 7 for i in range(300)],
        "n": list(range(300)),
    })  # fmt: skip
    records = split("csv", frame.write_csv().encode())
    assert [r.label for r in records] == frame["id"].to_list()
    assert [r.text for r in records] == frame["cif"].to_list()
    assert [r.properties for r in records] == frame.select("e", "n").to_dicts()


def test_rows_are_cut_the_same_however_the_stream_is_cut():
    class Dribble(io.BytesIO):
        step = 1

        def read1(self, size=-1):
            return super().read(self.step)

    rows = [["id", "cif"], *([str(i), f'x "{i}"\n,"\n'] for i in range(20))]
    data = csv_bytes(rows) + b'last,"a"\r\n\n5" wide,z'
    whole = split("csv", data)
    assert whole[-1].label == '5" wide' and len(whole) == 22
    for step in (1, 2, 3, 17):
        stream = Dribble(data)
        stream.step = step
        assert list(reader_named("csv").split(stream, "stem", SplitOptions())) == whole


def test_a_mark_inside_an_unquoted_field_does_not_swallow_rows():
    data = b'id,size,cif\na,5 x 3,t1\nb,5" wide,t2\nc,,t3\n'
    assert [(r.label, r.text) for r in split("csv", data)] == [("a", "t1"), ("b", "t2"), ("c", "t3")]


def test_a_repeated_column_is_kept():
    (record,) = split("csv", b"id,cif,e,e\n1,x,2,3\n")
    assert record.properties == {"e": 2, "e#2": 3}


@pytest.mark.parametrize(
    ("text", "value"),
    [("", None), ("1", 1), ("-3", -3), ("0", 0), ("007", "007"), ("1.", 1.0), (".5", 0.5), ("1e-3", 0.001),
     ("1e999", "1e999"), ("nan", "nan"), ("1_0", "1_0"), ("x", "x"), ("9" * 30, float("9" * 30)), ("+2", 2),
     (" 1", " 1"),     ("true", "true")],
)  # fmt: skip
def test_values_of_cells(text, value):
    assert typed(text) == value and type(typed(text)) is type(value)


def test_parquet_rows_and_types():
    table = pa.table({
        "material_id": [10, 11, None], "cif": [GOOD_CIF, None, "x"], "e": [1.5, float("nan"), None], "n": [1, 2, 3],
        "flag": [True, False, None], "nested": [[1, 2], None, []], "when": pa.array([0, 1, None], pa.timestamp("s")),
    })  # fmt: skip
    buffer = io.BytesIO()
    pq.write_table(table, buffer, row_group_size=2)
    records = split("parquet", buffer.getvalue())
    assert [r.label for r in records] == ["10", "11", "row 3"]
    assert [r.text for r in records] == [GOOD_CIF, None, "x"]
    when = "1970-01-01 00:00:00"
    assert records[0].properties == {"e": 1.5, "n": 1, "flag": True, "nested": "[1, 2]", "when": when}
    assert records[1].properties["e"] is None and records[2].properties["nested"] == "[]"


def test_parquet_from_a_stream_that_cannot_seek():
    class OneWay(io.RawIOBase):
        def __init__(self, data):
            self.inner = io.BytesIO(data)

        def readable(self):
            return True

        def readinto(self, b):
            return self.inner.readinto(b)

    buffer = io.BytesIO()
    pq.write_table(pa.table({"id": ["a"], "cif": ["x"]}), buffer)
    stream = io.BufferedReader(OneWay(buffer.getvalue()))
    assert [r.label for r in reader_named("parquet").split(stream, "s", SplitOptions())] == ["a"]


def test_one_column_may_hold_texts_of_several_formats():
    entry = {
        "lattice_vectors": [[4, 0, 0], [0, 5, 0], [0, 0, 6]], "cartesian_site_positions": [[0, 0, 0]],
        "species_at_sites": ["Ge"], "species": [{"name": "Ge", "chemical_symbols": ["Ge"], "concentration": [1]}],
    }  # fmt: skip
    lines = [
        {"id": 1, "structure": GOOD_CIF},
        {"id": 2, "structure": "nothing"},
        {"id": 3, "structure": POSCAR.replace("Si", "C")},
        {"id": 4, "structure": entry},
        {"id": 5, "structure": GOOD_FRAME.replace("Si", "O")},
        {"id": 6, "structure": None},
        {"id": 7, "structure": "\n  " + GOOD_CIF.replace("Si1 Si", "N1 N")},
    ]
    records = split("jsonl", "\n".join(map(json.dumps, lines)).encode())
    parsed = reader_named("jsonl").parse([r.text for r in records], ParseOptions())
    assert parsed.rows.tolist() == [0, 2, 3, 4, 6]
    assert [parsed.batch.tokens_of(i) for i in range(5)] == [["Si"], ["C"], ["Ge"], ["O"], ["N"]]
    assert [(i, r.reason) for i, r in parsed.refusals] == [(1, "text_unreadable"), (5, "text_missing")]
    assert (abs(parsed.batch.cells - parsed.batch.cells[0]) < 1e-12).all()


def test_labels_and_properties_can_always_be_stored():
    line = rb'{"id": "a\u0000b\ud800\n", "cif": "x", "note": "\udfff", "big": 99999999999999999999, "none": NaN}'
    (record,) = split("jsonl", line)
    record.label.encode()
    assert "\0" not in record.label and "\n" not in record.label
    json.dumps(record.properties, allow_nan=False).encode()
    record.properties["note"].encode()
    assert record.properties["big"] == "99999999999999999999"
