"""POSCAR-style text: comment, scale, three vectors, species and counts, then positions.

The scale is one factor, three factors (for x, y and z of everything Cartesian), or, negative, the volume of the cell.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from typing import BinaryIO

from ..model.raw import Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from ..model.species import element_of
from .sites import BatchBuilder, StructureRefused, check_coordinates, check_count, check_vectors, fractional, parse_each
from .streams import chunks_of, decoded


class PoscarReader:
    """One structure a file."""

    name = "poscar"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """The file as one record, labelled by its stem."""
        held: list[bytes] = []
        size = 0
        for chunk in chunks_of(stream):
            size += len(chunk)
            if size > options.max_text_bytes:
                message = f"the file is longer than the setting max_text_bytes allows ({options.max_text_bytes})"
                yield RawRecord(stem, None, {}, Refusal("text_too_long", message))
                return
            held.append(chunk)
        text = decoded(b"".join(held))
        refusal = None if text.strip() else Refusal("text_unreadable", "the file is empty")
        yield RawRecord(stem, text, {}, refusal)

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of POSCAR-style texts."""
        return parse_each(texts, lambda builder, row, text: _parse_one(builder, row, text, options.max_sites))


def _parse_one(builder: BatchBuilder, row: int, text: str, max_sites: int) -> None:
    lines = text.split("\n")
    if len(lines) < 7:
        raise StructureRefused("text_unreadable", f"{len(lines)} lines; a structure needs at least 8")
    vectors = [x for i in (2, 3, 4) for x in _three(lines[i], f"vector {i - 1}", "cell_missing", "cell_nonfinite")]
    cell, factors = _scaled(vectors, lines[1])
    at = 5
    names = lines[at].split()
    if names and not _is_number(names[0]):
        at += 1
    else:
        names = []
    counts = _counts(lines[at] if at < len(lines) else "")
    check_count(sum(counts), max_sites)
    symbols = _symbols(names, counts, lines[0])
    at += 1
    if at < len(lines) and lines[at].strip()[:1] in ("S", "s"):
        at += 1
    mode = lines[at].strip()[:1] if at < len(lines) else ""
    if not mode.isalpha():
        raise StructureRefused("text_unreadable", f"line {at + 1} does not say Direct or Cartesian")
    count = sum(counts)
    rows = lines[at + 1 : at + 1 + count]
    if len(rows) < count or not rows[-1].strip():
        given = sum(1 for r in rows if r.strip())
        raise StructureRefused("text_unreadable", f"{count} sites are named and {given} given: the text ends too early")
    flat = [
        x
        for i, line in enumerate(rows)
        for x in _three(line, f"site {i + 1}", "coordinates_missing", "coordinates_nonfinite")
    ]
    if mode in "CcKk":
        flat = fractional(cell, [x * factors[i % 3] for i, x in enumerate(flat)])
    check_coordinates(flat)
    builder.add(row, cell, flat, symbols)


def _is_number(word: str) -> bool:
    return re.fullmatch(r"[-+]?\d[\d.]*(?:[eEdD][-+]?\d+)?", word) is not None


def _three(line: str, what: str, missing: str, nonfinite: str) -> list[float]:
    words = line.split()[:3]
    if len(words) < 3:
        raise StructureRefused(missing, f"{what} has {len(words)} numbers, not 3")
    try:
        return [float(w) for w in words]
    except ValueError:
        pass
    try:
        return [float(w.lower().replace("d", "e")) for w in words]
    except ValueError:
        raise StructureRefused(nonfinite, f"{what} is {' '.join(words)!r}: not numbers") from None


def _scaled(vectors: list[float], line: str) -> tuple[list[float], list[float]]:
    """The scaled cell (nine numbers, rows) and the factors of x, y and z."""
    scales: list[float] = []
    for word in line.split()[:3]:
        try:
            scales.append(float(word.lower().replace("d", "e")))
        except ValueError:
            break
    if len(scales) == 2:
        scales = scales[:1]
    if not scales:
        raise StructureRefused("text_unreadable", f"line 2 is {line.strip()[:40]!r}, not a scale")
    if 0 in scales:
        raise StructureRefused("cell_zero", "the scale is 0")
    if len(scales) == 3:
        if min(scales) < 0:
            raise StructureRefused("cell_absurd", f"three scales of which one is negative: {line.strip()[:40]}")
        factors = scales
    elif scales[0] < 0:
        check_vectors([v * 1.0 for v in vectors])
        a, b, c = vectors[:3], vectors[3:6], vectors[6:]
        volume = abs(
            a[0] * (b[1] * c[2] - b[2] * c[1]) - a[1] * (b[0] * c[2] - b[2] * c[0]) + a[2] * (b[0] * c[1] - b[1] * c[0])
        )
        factors = [(-scales[0] / volume) ** (1 / 3)] * 3
    else:
        factors = scales * 3
    cell = [v * factors[i % 3] for i, v in enumerate(vectors)]
    check_vectors(cell)
    return cell, factors


def _counts(line: str) -> list[int]:
    counts: list[int] = []
    for word in line.split():
        if not word.isdigit() or len(word) > 18:
            break
        counts.append(int(word))
    if not counts:
        raise StructureRefused("text_unreadable", f"no counts of sites: {line.strip()[:40]!r}")
    return counts


def _symbols(names: list[str], counts: list[int], comment: str) -> list[str]:
    if names:
        # A name may go on with the potential that was used: Fe_pv, Fe/a1b2c3.
        elements = [element_of(re.split(r"[_/.\d]", n)[0]) for n in names[: len(counts)]]
        if len(elements) < len(counts) or None in elements:
            raise StructureRefused("species_unknown", f"{len(counts)} counts, and the species {' '.join(names)[:60]!r}")
    else:
        elements = [e for w in comment.split() if (e := element_of(w)) is not None]
        if len(elements) != len(counts):
            message = (
                f"no line of species, and the comment {comment.strip()[:60]!r} does not name {len(counts)} elements"
            )
            raise StructureRefused("species_unknown", message)
    return [e for e, n in zip(elements, counts, strict=True) for _ in range(n) if e is not None]
