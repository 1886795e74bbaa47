"""Tables of text: comma-separated values as RFC 4180 describes them (also with tabs or semicolons).

Rows are cut before they are read: a row ends at the first line feed outside quotation marks. So a row that is too long
or broken costs that row alone, and no more than one row is held.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from typing import BinaryIO

from ..model.raw import FileRefused, Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from .streams import chunks_of
from .tables import chosen_columns, label_of, parse_texts, typed

_BEFORE_MARK = frozenset({b",", b"\t", b";", b"\n", b'"'})


class CsvReader:
    """A header line, then one structure a row."""

    name = "csv"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record a row after the header; blank lines are no rows.

        A row with another number of fields than the header is refused alone; a quotation mark that is never closed and
        bytes that are not UTF-8 end the file (FileRefused).
        """
        csv.field_size_limit(max(csv.field_size_limit(), 2 * options.max_text_bytes + 1_000_000))
        rows = _rows_of(stream, options.max_text_bytes)
        header = next(rows, None)
        if header is None or not header.strip():
            raise FileRefused(Refusal("file_unreadable", "the table is empty: it has no header line", "read"))
        delimiter = max(",\t;", key=_decoded(header, 0).count)
        try:
            columns = _distinct(_fields(header, 0, delimiter))
        except csv.Error as error:
            raise FileRefused(Refusal("file_unreadable", f"the header line: {error}", "read")) from None
        id_column, structure_column = chosen_columns(columns, options)
        structure_at = columns.index(structure_column)
        id_at = columns.index(id_column) if id_column is not None else None
        others = [(i, c) for i, c in enumerate(columns) if i not in (structure_at, id_at)]
        number = 0
        for raw in rows:
            if raw is not None and not raw.strip():
                continue
            number += 1
            if raw is None:
                message = f"row {number} is longer than the setting max_text_bytes allows ({options.max_text_bytes})"
                yield RawRecord(f"row {number}", None, {}, Refusal("text_too_long", message))
                continue
            try:
                fields = _fields(raw, number, delimiter)
            except csv.Error as error:
                yield _broken(number, f"row {number}: {error}")
                continue
            if len(fields) != len(columns):
                message = f"row {number} has {len(fields)} fields, the header has {len(columns)}"
                at_id = fields[id_at] if id_at is not None and id_at < len(fields) else None
                yield _broken(number, message, label_of(at_id, number))
                continue
            label = label_of(fields[id_at] if id_at is not None else None, number)
            yield RawRecord(label, fields[structure_at] or None, {c: typed(fields[i]) for i, c in others})

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of the texts of the structure column."""
        return parse_texts(texts, options)


def _rows_of(stream: BinaryIO, limit: int) -> Iterator[bytes | None]:
    """The rows as bytes, without interpreting them; None for one longer than the limit, which is not kept.

    A row ends at the first line feed outside quotation marks. Raises FileRefused where the stream ends inside them.
    """
    held: list[bytes] = []
    size, number, inside = 0, 0, False
    last = b"\n"
    for chunk in chunks_of(stream):
        start = at = 0
        quote = chunk.find(b'"')
        while True:
            if not inside:
                end = chunk.find(b"\n", at)
                if end >= 0 and (quote < 0 or end < quote):
                    size += end + 1 - start
                    held.append(chunk[start : end + 1])
                    yield b"".join(held) if size <= limit else None
                    start = at = end + 1
                    size, number, held = 0, number + 1, []
                    continue
            if quote < 0:
                break
            # A mark in the middle of an unquoted field is a character like others; one right after another reopens.
            if inside or (chunk[quote - 1 : quote] if quote else last) in _BEFORE_MARK:
                inside = not inside
            at = quote + 1
            quote = chunk.find(b'"', at)
        last = chunk[-1:]
        size += len(chunk) - start
        if size <= limit:
            held.append(chunk[start:])
        else:
            held.clear()
    if inside:
        message = f"a quotation mark opened in row {number} (the header is row 0) is never closed"
        raise FileRefused(Refusal("text_unreadable", message, "read"))
    if size:
        yield b"".join(held) if size <= limit else None


def _decoded(raw: bytes, number: int) -> str:
    try:
        text = raw.decode()
    except UnicodeDecodeError as error:
        message = f"row {number} is not UTF-8 text (byte {raw[error.start]:#04x}): {error.reason}"
        raise FileRefused(Refusal("file_unreadable", message, "read")) from None
    if "\0" in text:
        raise FileRefused(Refusal("file_unreadable", f"row {number} holds NUL bytes: no table of text", "read"))
    return text


def _fields(raw: bytes, number: int, delimiter: str) -> list[str]:
    return next(csv.reader((_decoded(raw, number),), delimiter=delimiter, strict=True), [])


def _broken(number: int, message: str, label: str | None = None) -> RawRecord:
    return RawRecord(label or f"row {number}", None, {}, Refusal("text_unreadable", message))


def _distinct(columns: list[str]) -> list[str]:
    """Column names, a repeated one numbered (#2, #3), so that no column is lost."""
    seen: dict[str, int] = {}
    result = []
    for column in columns:
        seen[column] = seen.get(column, 0) + 1
        result.append(column if seen[column] == 1 else f"{column}#{seen[column]}")
    return result
