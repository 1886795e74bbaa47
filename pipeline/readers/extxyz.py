"""Extended XYZ: any number of frames, each a count, a comment line of key=value pairs, and a line a site."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
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
        lines = lines_of(stream, options.max_text_bytes)
        number = 0
        line = next(lines, None)
        while line is not None:
            if not line.strip():
                line = next(lines, None)
                continue
            number += 1
            label = f"{stem}/{number}"
            if not _is_count(line):
                shown = decoded(line[:60]).strip()
                yield _broken(label, "text_unreadable", f"frame {number} begins with {shown!r}, not with a count")
                line = _next_count(lines)
                continue
            count = int(line)
            if count * _SHORTEST_LINE > options.max_text_bytes:
                message = f"frame {number} claims {count} sites, more than max_text_bytes can hold"
                yield _broken(label, "sites_too_many", message)
                line = _next_count(lines)
                continue
            record, line = _frame(lines, line, count, number, label, options.max_text_bytes)
            yield record

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of texts with one frame each."""
        return parse_each(texts, lambda builder, row, text: _parse_one(builder, row, text, options.max_sites))


def _is_count(line: bytes) -> bool:
    return line.strip().isdigit()


def _next_count(lines: Iterator[bytes]) -> bytes | None:
    return next((line for line in lines if _is_count(line)), None)


def _broken(label: str, reason: str, message: str) -> RawRecord:
    return RawRecord(label, None, {}, Refusal(reason, message))


def _frame(
    lines: Iterator[bytes], first: bytes, count: int, number: int, label: str, limit: int
) -> tuple[RawRecord, bytes | None]:
    """The record of a frame and the line after it (None at the end of the file)."""
    comment = next(lines, b"")
    held, size, met = [first, comment], len(first) + len(comment), 0
    after: bytes | None = None
    for line in lines:
        if met == count and not line.strip():
            continue
        if met == count or _is_count(line):
            after = line
            break
        met += 1
        size += len(line)
        if size <= limit:
            held.append(line)
        else:
            held.clear()
    if size > limit:
        message = f"frame {number} has {size} bytes; the setting max_text_bytes allows {limit}"
        return _broken(label, "text_too_long", message), after
    try:
        pairs = comment_pairs(decoded(comment))
    except CommentError as error:
        return _broken(label, "text_unreadable", f"the comment line of frame {number}: {error}"), after
    named = next((k for k in LABEL_KEYS if pairs.get(k)), None)
    if named is not None:
        label = clean_text(pairs[named])
    if met < count:
        message = f"frame {number} claims {count} sites and has {met}"
        return _broken(label, "text_unreadable", message), after
    # A line of a site where the count of the next frame should stand belongs to this frame; any other is the beginning
    # of a broken frame.
    if after is not None and len(after.split()) >= 4:
        message = f"frame {number} claims {count} sites and more lines follow"
        return _broken(label, "text_unreadable", message), _next_count(lines)
    words = any("=" in part for part in decoded(comment).split())
    properties = {
        clean_text(k): property_of(v) for k, v in pairs.items() if words and k != named and k.lower() not in _OWN_KEYS
    }
    return RawRecord(label, decoded(b"".join(held)), properties), after


def _parse_one(builder: BatchBuilder, row: int, text: str, max_sites: int) -> None:
    lines = text.split("\n")
    if not lines[0].strip().isdigit() or len(lines) < 2:
        raise StructureRefused("text_unreadable", "the first line is not a count, or there is no comment line")
    count = int(lines[0])
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
