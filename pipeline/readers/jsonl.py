"""JSON lines: one object a line, a column a key."""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from typing import BinaryIO

from ..model.raw import FileRefused, Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from .streams import lines_of
from .tables import chosen_columns, parse_texts, record_of


class JsonLinesReader:
    """Objects with a structure text (or an object that OPTIMADE would call the attributes of a structure) each."""

    name = "jsonl"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record a line that is not blank; a line that is no JSON object is refused alone.

        The columns are those of each object; a file whose first object has no structure column is refused whole.
        """
        chosen: tuple[str | None, str] | None = None
        for number, line in objects_of(stream, options.max_text_bytes):
            if isinstance(line, Refusal):
                yield RawRecord(f"row {number}", None, {}, line)
                continue
            if chosen is None:
                chosen = chosen_columns(list(line), options)
            yield record_of(number, line, chosen[0], chosen[1], options.max_text_bytes)

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of the texts of the structure column."""
        return parse_texts(texts, options)


def objects_of(stream: BinaryIO, limit: int) -> Iterator[tuple[int, dict[str, object] | Refusal]]:
    """The number (from 1, blank lines not counted) and the object of each line, or why it has none.

    Raises FileRefused for bytes that are not UTF-8.
    """
    number, size = 0, 0
    for line in lines_of(stream, limit):
        size += len(line)
        ended = line[-1:] in (b"\n", b"\r")
        if size > limit or (not ended and len(line) >= limit):
            # Pieces of one overlong line: count it once, when its end (or that of the file) is met.
            if ended:
                number, size = number + 1, 0
                yield number, _too_long(limit)
            continue
        size = 0
        if line.strip():
            number += 1
            yield number, _object(line, number)
    if size:
        yield number + 1, _too_long(limit)


def _too_long(limit: int) -> Refusal:
    return Refusal("text_too_long", f"the line is longer than the setting max_text_bytes allows ({limit})")


def _object(line: bytes, number: int) -> dict[str, object] | Refusal:
    try:
        value = json.loads(line.decode())
    except UnicodeDecodeError as error:
        message = f"line {number} is not UTF-8 text: {error.reason}"
        raise FileRefused(Refusal("file_unreadable", message, "read")) from None
    except (ValueError, RecursionError) as error:
        return Refusal("text_unreadable", f"line {number} is no JSON: {error}")
    if not isinstance(value, dict):
        return Refusal("text_unreadable", f"line {number} holds {type(value).__name__}, not an object")
    return value
