"""What the readers of tables share: which column is which, labels, values, and the format of a structure text."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping, Sequence

import numpy as np

from ..model.batch import CrystalBatch
from ..model.raw import FileRefused, Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from .detect import format_of_text
from .streams import clean_text

ID_COLUMNS = ("id", "material_id", "label", "name")
"""Columns that name a record, the first that is there counts."""

STRUCTURE_COLUMNS = ("cif", "structure")
"""Columns that hold the structure text, the first that is there counts."""

_INTEGER = re.compile(r"[+-]?(?:0|[1-9]\d{0,17})")
_NUMBER = re.compile(r"[+-]?(?:(?:0|[1-9]\d*)(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?")


def chosen_columns(columns: Sequence[str], options: SplitOptions) -> tuple[str | None, str]:
    """The id column (None: rows are numbered) and the structure column of a table.

    Raises FileRefused with the columns that are there: for a named one that is not, and where none holds structures.
    """
    there = ", ".join(repr(c) for c in columns[:50]) + (", ..." if len(columns) > 50 else "")
    for named, what in ((options.id_column, "id"), (options.structure_column, "structure")):
        if named is not None and named not in columns:
            message = f"no column {named!r} for the {what} column; the columns are {there}"
            raise FileRefused(Refusal("file_unreadable", message, "read"))
    structure = options.structure_column or next((c for c in STRUCTURE_COLUMNS if c in columns), None)
    if structure is None:
        message = f"no column {' or '.join(STRUCTURE_COLUMNS)} with structure texts; the columns are {there}"
        raise FileRefused(Refusal("file_unreadable", message, "read"))
    return options.id_column or next((c for c in ID_COLUMNS if c in columns and c != structure), None), structure


def record_of(
    row: int, values: Mapping[str, object], id_column: str | None, structure_column: str, limit: int
) -> RawRecord:
    """The raw record of one row (counted from 1); properties are all other columns."""
    label = label_of(values.get(id_column) if id_column is not None else None, row)
    properties = {k: plain(v) for k, v in values.items() if k != id_column and k != structure_column}
    text = values.get(structure_column)
    if isinstance(text, dict | list):
        text = json.dumps(text)
    if text is not None and not isinstance(text, str):
        refusal = Refusal("text_unreadable", f"column {structure_column!r} holds {type(text).__name__}, not a text")
        return RawRecord(label, None, properties, refusal)
    if text is not None and len(text) > limit:
        refusal = Refusal("text_too_long", f"{len(text)} characters; the setting max_text_bytes allows {limit}")
        return RawRecord(label, None, properties, refusal)
    return RawRecord(label, text, properties)


def label_of(value: object, row: int) -> str:
    """The label of a row from its id, or `row N` where it has none."""
    if value is None or value == "":
        return f"row {row}"
    return clean_text(value if isinstance(value, str) else str(value)) or f"row {row}"


def typed(text: str) -> object:
    """A property from a cell of text: int or float where the text is just that, None where it is empty.

    Numbers with leading zeros stay text: they are names.
    """
    if not text:
        return None
    if _INTEGER.fullmatch(text):
        return int(text)
    if _NUMBER.fullmatch(text):
        number = float(text)
        return number if math.isfinite(number) else text
    return text


def plain(value: object) -> object:
    """A property as it is stored: str, int, float, bool or None; anything nested as JSON text."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, str):
        return value if value.isascii() else value.encode("utf-8", "replace").decode()
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, int):
        return value if -(2**63) <= value < 2**63 else str(value)
    if isinstance(value, dict | list | tuple):
        return json.dumps(value, default=str)
    return str(value)


def parse_texts(texts: Sequence[str | None], options: ParseOptions) -> Parsed:
    """Crystals of the texts of a table column, each in the format that it shows (CIF unless it shows another)."""
    from . import reader_named

    rows: dict[str, list[int]] = {}
    for i, text in enumerate(texts):
        rows.setdefault(format_of_text(text), []).append(i)
    if len(rows) == 1:
        (name,) = rows
        return reader_named(name).parse(texts, options)
    parts = [(np.array(at), reader_named(name).parse([texts[i] for i in at], options)) for name, at in rows.items()]
    return _joined(parts)


def _joined(parts: Sequence[tuple[np.ndarray, Parsed]]) -> Parsed:
    """One Parsed from several, each with the input rows that its own rows count into."""
    tokens = tuple(sorted({t for _, p in parts for t in p.batch.tokens}))
    code = {t: i for i, t in enumerate(tokens)}
    species = [np.array([code[t] for t in p.batch.tokens], np.int32)[p.batch.species] for _, p in parts if len(p.rows)]
    filled = [(at, p) for at, p in parts if len(p.rows)]
    rows = np.concatenate([at[p.rows] for at, p in filled] or [np.zeros(0, np.int64)])
    counts = np.concatenate([np.diff(p.batch.offsets) for _, p in filled] or [np.zeros(0, np.int64)])
    batch = CrystalBatch(
        cells=np.concatenate([p.batch.cells for _, p in filled] or [np.zeros((0, 3, 3))]),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        positions=np.concatenate([p.batch.positions for _, p in filled] or [np.zeros((0, 3))]),
        species=np.concatenate(species or [np.zeros(0, np.int32)]),
        tokens=tokens,
        periodicity=np.concatenate([p.batch.periodicity for _, p in filled] or [np.zeros(0, np.uint8)]),
    )
    from ..model.batch import select

    order = np.argsort(rows, kind="stable")
    properties = [q for _, p in filled for q in p.properties]
    refusals = sorted(((int(at[i]), r) for at, p in parts for i, r in p.refusals), key=lambda pair: pair[0])
    return Parsed(
        select(batch, order), rows[order].astype(np.int64), tuple(refusals), tuple(properties[i] for i in order)
    )
