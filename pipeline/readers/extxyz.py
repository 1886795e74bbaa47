"""Extended XYZ: any number of frames, each a count, a comment line of key=value pairs, and a line a site."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from itertools import islice
from typing import BinaryIO

from ..model.raw import Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from ..model.species import element_of, element_of_number
from .comment_line import CommentError, array_of, comment_pairs, property_of
from .layers import oriented_cell
from .sites import (
    BatchBuilder,
    StructureRefused,
    check_coordinates,
    check_count,
    check_vectors,
    fractional,
    merge_mixed,
    parse_each,
)
from .streams import clean_text, decoded, lines_of

LABEL_KEYS = ("label", "id", "name", "config_name")
"""Keys of the comment line that name a frame, the first that is there counts."""

_OWN_KEYS = frozenset({"lattice", "properties", "pbc"})
_BARE_COUNT = re.compile(rb"^[ \t]*\d+[ \t\r]*$", re.MULTILINE)
_LINES_AT_ONCE = 4096
_SHORTEST_LINE = 8
"""Bytes of the shortest line of a site: `H 0 0 0` and its line end."""


class ExtendedXyzReader:
    """Frames one after the other; blank lines between them are allowed."""

    name = "extxyz"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record a frame.

        A frame whose count and lines do not agree is refused alone: reading goes on at the next line that holds nothing
        but a count, which no line of a site does.
        """
        lines = _Lines(lines_of(stream, options.max_text_bytes))
        number = 0
        while (line := lines.next_filled()) is not None:
            number += 1
            label = f"{stem}/{number}"
            if not _is_count(line):
                shown = decoded(line[:60]).strip()
                yield _broken(label, "text_unreadable", f"frame {number} begins with {shown!r}, not with a count")
                lines.to_next_count()
                continue
            count = _count(line)
            if count * _SHORTEST_LINE > options.max_text_bytes:
                message = f"frame {number} claims {count} sites, more than max_text_bytes can hold"
                yield _broken(label, "sites_too_many", message)
                lines.to_next_count()
                continue
            yield _frame(lines, line, count, number, label, options.max_text_bytes)

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of texts with one frame each."""
        return parse_each(texts, lambda builder, row, text: _parse_one(builder, row, text, options.max_sites))


class _Lines:
    """Lines that can be given back."""

    def __init__(self, lines: Iterator[bytes]) -> None:
        self._lines = lines
        self._back: list[bytes] = []
        """Lines that come next, the last one first."""

    def _next(self) -> bytes | None:
        return self._back.pop() if self._back else next(self._lines, None)

    def next_filled(self) -> bytes | None:
        """The next line that is not blank."""
        while (line := self._next()) is not None and not line.strip():
            pass
        return line

    def take(self, number: int) -> list[bytes]:
        """Up to so many lines; none at the end."""
        taken = [self._back.pop() for _ in range(min(number, len(self._back)))]
        taken.extend(islice(self._lines, number - len(taken)))
        return taken

    def give_back(self, lines: list[bytes]) -> None:
        """Have these lines come next."""
        self._back.extend(reversed(lines))

    def to_next_count(self) -> None:
        """Pass over lines until the next is nothing but a count."""
        while (line := self._next()) is not None:
            if _is_count(line):
                self.give_back([line])
                return


def _is_count(line: bytes) -> bool:
    return line.strip().isdigit()


def _count(line: bytes) -> int:
    """The number on a line, or 10^18 where it is longer than any number that is meant."""
    digits = line.strip()
    return int(digits) if len(digits) <= 18 else 10**18


def _broken(label: str, reason: str, message: str) -> RawRecord:
    return RawRecord(label, None, {}, Refusal(reason, message))


def _frame(lines: _Lines, first: bytes, count: int, number: int, label: str, limit: int) -> RawRecord:
    """The record of the frame that begins with the line `first`."""
    comment = b"".join(lines.take(1))
    held, size, met = [first, comment], len(first) + len(comment), 0
    while met < count:
        part = lines.take(min(count - met, _LINES_AT_ONCE))
        text = b"".join(part)
        if early := _BARE_COUNT.search(text):
            # The next frame begins before this one is full.
            begin = text.count(b"\n", 0, early.start())
            lines.give_back(part[begin:])
            part, text = part[:begin], text[: early.start()]
        met += len(part)
        size += len(text)
        if size <= limit:
            held.append(text)
        else:
            held.clear()
        if early or not part:
            break
    after = lines.next_filled()
    more = after is not None and not _is_count(after) and len(after.split()) >= 4
    if after is not None:
        lines.give_back([after])
    if more:
        # A line of a site where the count of the next frame should stand belongs to this frame; any other line is the
        # beginning of a broken frame.
        lines.to_next_count()
    if size > limit:
        message = f"frame {number} has {size} bytes; the setting max_text_bytes allows {limit}"
        return _broken(label, "text_too_long", message)
    try:
        shown = decoded(comment)
        pairs = comment_pairs(shown)
    except CommentError as error:
        return _broken(label, "text_unreadable", f"the comment line of frame {number}: {error}")
    if "=" not in shown:
        # Words of prose, not keys.
        pairs = {}
    named = next((k for k in LABEL_KEYS if pairs.get(k) and re.search(rf"\b{k}\b\"?\s*=", shown)), None)
    if named is not None:
        label = clean_text(pairs[named])
    if met < count or more:
        found = "more lines follow" if more else f"has {met}"
        return _broken(label, "text_unreadable", f"frame {number} claims {count} sites and {found}")
    properties = {clean_text(k): property_of(v) for k, v in pairs.items() if k != named and k.lower() not in _OWN_KEYS}
    return RawRecord(label, decoded(b"".join(held)), properties)


def _parse_one(builder: BatchBuilder, row: int, text: str, max_sites: int) -> None:
    lines = text.split("\n")
    if not lines[0].strip().isdigit() or len(lines) < 2:
        raise StructureRefused("text_unreadable", "the first line is not a count, or there is no comment line")
    count = _count(lines[0].encode())
    try:
        pairs = {k.lower(): v for k, v in comment_pairs(lines[1]).items()}
        lattice = _lattice(pairs)
        periodic = _periodic(pairs)
    except CommentError as error:
        raise StructureRefused("text_unreadable", f"the comment line: {error}") from None
    check_count(count, max_sites)
    sites = [line.split() for line in lines[2:] if line and not line.isspace()]
    if len(sites) != count:
        raise StructureRefused("text_unreadable", f"the frame claims {count} sites and has {len(sites)}")
    columns, width = _columns(pairs.get("properties", "species:S:1:pos:R:3"))
    at = columns["pos"]
    for i, fields in enumerate(sites):
        if len(fields) != width:
            reason = "coordinates_missing" if len(fields) < at + 3 else "text_unreadable"
            raise StructureRefused(reason, f"site {i + 1} has {len(fields)} fields; Properties names {width}")
    cartesian = _reals([f for fields in sites for f in fields[at : at + 3]], "coordinates_nonfinite")
    symbols = _symbols(sites, columns)
    cell, periodicity = oriented_cell(lattice, periodic, cartesian)
    check_vectors(cell)
    positions = fractional(cell, cartesian)
    check_coordinates(positions)
    if "occupancy" in columns:
        occupancies = _reals([fields[columns["occupancy"]] for fields in sites], "occupancy_invalid")
        positions, symbols = merge_mixed(cell, positions, symbols, occupancies)
    builder.add(row, cell, positions, symbols, periodicity)


def _lattice(pairs: dict[str, str]) -> list[float]:
    """Nine numbers, rows a, b, c. A nested array is a matrix whose columns are the vectors, as the format has it."""
    if "lattice" not in pairs:
        raise StructureRefused("cell_missing", "the comment line has no Lattice")
    entries = array_of(pairs["lattice"])
    if any(isinstance(e, list) for e in entries):
        if len(entries) != 3 or not all(isinstance(e, list) and len(e) == 3 for e in entries):
            raise StructureRefused("cell_missing", "Lattice is not a 3 x 3 matrix")
        entries = [row[i] for i in range(3) for row in entries if isinstance(row, list)]
    if len(entries) == 3:
        entries = [entries[0], 0.0, 0.0, 0.0, entries[1], 0.0, 0.0, 0.0, entries[2]]
    if len(entries) != 9:
        raise StructureRefused("cell_missing", f"Lattice has {len(entries)} numbers, not 9")
    return _reals([str(e) for e in entries], "cell_nonfinite")


def _periodic(pairs: dict[str, str]) -> list[bool]:
    if "pbc" not in pairs:
        return [True, True, True]
    flags = array_of(pairs["pbc"])
    if len(flags) == 1:
        flags = flags * 3
    if len(flags) != 3 or not all(f in (0, 1) for f in flags):
        raise CommentError(f"pbc is {pairs['pbc']!r}, not three of T and F")
    return [bool(f) for f in flags]


def _columns(properties: str) -> tuple[dict[str, int], int]:
    """Where each property begins in a line of a site, and the number of fields of a line."""
    parts = properties.split(":")
    if len(parts) % 3 or not all(n.isdigit() and 0 < int(n) < 10_000 for n in parts[2::3]):
        raise StructureRefused("text_unreadable", f"Properties is {properties!r}: not name:type:count, repeated")
    columns: dict[str, int] = {}
    width = 0
    for name, length in zip(parts[0::3], map(int, parts[2::3]), strict=True):
        if name == "pos" and length != 3:
            raise StructureRefused("coordinates_missing", f"Properties gives {length} coordinates a site")
        columns.setdefault(name, width)
        width += length
    if "pos" not in columns:
        raise StructureRefused("coordinates_missing", f"Properties is {properties!r}: it names no pos")
    return columns, width


def _reals(texts: list[str], reason: str) -> list[float]:
    try:
        return list(map(float, texts))
    except ValueError:
        pass
    try:
        return [float(t.lower().replace("d", "e")) for t in texts]
    except ValueError as error:
        raise StructureRefused(reason, f"not a number: {str(error).split(':')[-1].strip()}") from None


def _symbols(sites: list[list[str]], columns: dict[str, int]) -> list[str]:
    symbols: list[str] = []
    if "species" in columns:
        at = columns["species"]
        for i, fields in enumerate(sites):
            symbol = element_of(fields[at])
            if symbol is None:
                raise StructureRefused("species_unknown", f"site {i + 1}: {fields[at]!r} is no chemical element")
            symbols.append(symbol)
        return symbols
    if "Z" not in columns:
        raise StructureRefused("species_unknown", "Properties names neither species nor Z")
    for i, fields in enumerate(sites):
        number = fields[columns["Z"]]
        symbol = element_of_number(int(number)) if number.isdigit() and len(number) < 4 else None
        if symbol is None:
            raise StructureRefused("species_unknown", f"site {i + 1}: atomic number {number}")
        symbols.append(symbol)
    return symbols
