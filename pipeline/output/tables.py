"""The one way to print tables and numbers: plain text that a person reads and a pipe can carry.

Text from the outside (labels, file names, messages) may hold control characters; none reaches a terminal raw.
"""

from __future__ import annotations

import math
import unicodedata
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any
from uuid import UUID

LONGEST_CELL = 72
"""Characters of a cell that are printed before it is cut; a SHA-256 in hex fits."""

MISSING = "-"
"""What stands for NULL in a printed table, so that columns can be counted by white space."""

UNITS = {
    "_angstrom3_per_site": "Å3/site",
    "_ev_per_site": "eV/site",
    "_angstrom": "Å",
    "_deg": "deg",
    "_percent": "%",
    "_bytes": "bytes",
}
"""Endings of column names, and the unit that they stand for in a heading."""

_ESCAPED = frozenset({"Cc", "Cf", "Cs", "Zl", "Zp"})
"""Unicode categories that steer a terminal or the direction of text: controls, formats, surrogates, line ends."""

_PLAIN_ESCAPES = {"\n": "\\n", "\r": "\\r", "\t": "\\t"}


@dataclass(frozen=True, slots=True)
class Table:
    """A table with what it shows."""

    title: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]

    def as_json(self) -> dict[str, Any]:
        """Title, and rows as objects; ready for json.dumps."""
        return {"title": self.title, "rows": [json_row(self.columns, row) for row in self.rows]}

    def text(self) -> str:
        """Title, headings with units, rows; lines without the last newline."""
        body = table_text([heading(c) for c in self.columns], self.rows) if self.rows else "(none)"
        return f"{safe(self.title)}\n{body}"


def safe(text: str) -> str:
    """The text with every control or format character, and every line end, written as an escape."""
    if text.isascii() and text.isprintable():
        return text
    return "".join(_escape(c) if unicodedata.category(c) in _ESCAPED else c for c in text)


def safe_lines(text: str) -> str:
    """As `safe`, line by line: for messages that are meant to have lines."""
    return "\n".join(safe(line) for line in text.split("\n"))


def _escape(character: str) -> str:
    if character in _PLAIN_ESCAPES:
        return _PLAIN_ESCAPES[character]
    code = ord(character)
    return f"\\x{code:02x}" if code < 256 else f"\\u{code:04x}" if code < 65536 else f"\\U{code:08x}"


def heading(column: str) -> str:
    """The name of a column as a heading: `volume_angstrom3_per_site` is `volume (Å3/site)`."""
    for ending, unit in UNITS.items():
        if column.endswith(ending) and column != ending:
            return f"{column.removesuffix(ending).replace('_', ' ')} ({unit})"
    return column.replace("_", " ")


def number(value: float) -> str:
    """A number for a person: integers whole, others to 4 significant digits (never fewer than all before the point);
    thousands are parted by commas."""
    if isinstance(value, int):
        return f"{value:,}"
    if not math.isfinite(value):
        return str(value)
    if value == 0:
        return "0"
    size = abs(value)
    if size >= 1e15 or size < 1e-4:
        return f"{value:.3e}"
    # Digits after the point follow from the rounded value, so that 9.9996 is 10.00 and not 10.000.
    exponent = math.floor(math.log10(abs(float(f"{value:.3e}"))))
    return f"{value:,.{max(0, 3 - exponent)}f}"


def cell_text(value: Any) -> str:
    """One value of a table as printed: safe, and cut where it is very long."""
    text = _whole_text(value)
    return text if len(text) <= LONGEST_CELL else text[: LONGEST_CELL - 3] + "..."


def _whole_text(value: Any) -> str:
    if value is None:
        return MISSING
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int | float):
        return number(value)
    if isinstance(value, Decimal):
        return number(float(value)) if value.is_finite() and value % 1 else safe(f"{value:,f}")
    if isinstance(value, datetime):
        return value.isoformat(sep=" ", timespec="seconds")
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{_whole_text(k)}: {_whole_text(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_whole_text(v) for v in value) + "]"
    return safe(str(value))


def table_text(headings: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """Headings, a rule, and rows, in columns two spaces apart: numbers to the right, the rest to the left."""
    rows = list(rows)
    texts = [[cell_text(v) for v in row] for row in rows]
    heads = [safe(h) for h in headings]
    right = [_is_numeric(row[i] for row in rows) for i in range(len(heads))]
    widths = [max([_width(heads[i]), *(_width(t[i]) for t in texts)]) for i in range(len(heads))]
    lines = [_line(heads, widths, right), "  ".join("-" * w for w in widths)]
    lines += [_line(t, widths, right) for t in texts]
    return "\n".join(lines)


def _is_numeric(values: Iterable[Any]) -> bool:
    present = [v for v in values if v is not None]
    return bool(present) and all(isinstance(v, int | float | Decimal) and not isinstance(v, bool) for v in present)


def _line(texts: Sequence[str], widths: Sequence[int], right: Sequence[bool]) -> str:
    cells = []
    for text, width, to_the_right in zip(texts, widths, right, strict=True):
        pad = " " * (width - _width(text))
        cells.append(pad + text if to_the_right else text + pad)
    return "  ".join(cells).rstrip()


def _width(text: str) -> int:
    """Columns of a terminal: wide East Asian characters take two, combining marks none."""
    if text.isascii():
        return len(text)
    return sum(
        0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in ("W", "F") else 1 for c in text
    )


def json_value(value: Any) -> Any:
    """A value of DuckDB as JSON has it: numbers that are not finite are null, bytes are hex, times ISO 8601."""
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Decimal):
        return json_value(float(value)) if value % 1 else int(value)
    if isinstance(value, datetime | date | time):
        return value.isoformat()
    if isinstance(value, timedelta):
        return value.total_seconds()
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, UUID):
        return str(value)
    if isinstance(value, Mapping):
        return {str(k): json_value(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [json_value(v) for v in value]
    return str(value)


def json_row(columns: Sequence[str], row: Sequence[Any]) -> dict[str, Any]:
    """One row as an object."""
    return {column: json_value(value) for column, value in zip(columns, row, strict=True)}
