"""Crystallographic information files: cut at their data blocks, and parsed with the symmetry expanded.

`split` streams and never holds more than one block. `parse` takes the grammar from gemmi and the meaning
from the core dictionary of the IUCr (Hall, Allen & Brown 1991): listed operations are authoritative, else the Hall
symbol, the Hermann-Mauguin name and the number, in that order; where nothing is stated there is no symmetry to add.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from functools import lru_cache
from typing import BinaryIO

import gemmi
import numpy as np

from ..model.raw import Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from ..model.species import element_of
from .cif_symmetry import symmetry_of
from .sites import (
    BatchBuilder,
    StructureRefused,
    cell_of_parameters,
    check_coordinates,
    check_count,
    fractional,
    merge_mixed,
    parse_each,
)
from .streams import blocks_of, clean_text, decoded
from .symmetry import expand

_LENGTHS = tuple(f"_cell_{part}" for part in ("length_a", "length_b", "length_c"))
_CELL = _LENGTHS + tuple(f"_cell_{part}" for part in ("angle_alpha", "angle_beta", "angle_gamma"))
_CELL_DOTTED = tuple(tag.replace("_cell_", "_cell.") for tag in _CELL)
_UNKNOWN = frozenset({"?", "."})
_FULL = frozenset({"1", "1.", "1.0", "1.00", "1.000", "1.0000", ".", "?"})
_STRUCTURAL = re.compile(
    rb"^[ \t]*_(?:cell[_.](?:length|angle)_|atom_site[_.](?:fract|cartn|label|type_symbol))",
    re.IGNORECASE | re.MULTILINE,
)
_MARK = re.compile(rb"^(?:;|[ \t]*(data_)(\S*))", re.IGNORECASE | re.MULTILINE)
_COMMENTS = re.compile(rb"(?:[ \t\r]*(?:#[^\n]*)?(?:\n|\Z))*")


class CifReader:
    """Files of one or many data blocks (see readers/sites.py for what is refused)."""

    name = "cif"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record a data block; a block without cell and sites is passed over where the file has several.

        A file in which no block has any is one record, to be refused.
        """
        blocks, given = 0, 0
        current = _Block("", options.max_text_bytes)
        in_text_field = False
        for piece, begins_line in blocks_of(stream, options.max_text_bytes):
            start = 0
            for match in _MARK.finditer(piece, 0 if begins_line else 1):
                if match[1] is None:
                    in_text_field = not in_text_field
                    continue
                if in_text_field:
                    continue
                current.take(piece[start : match.start()])
                start = match.start()
                blocks += 1
                if blocks > 1:
                    if current.structural:
                        yield current.record(stem, True)
                        given += 1
                    current = _Block(_block_name(match[2]) or str(blocks), options.max_text_bytes)
                else:
                    if current.only_comments:
                        current = _Block("", options.max_text_bytes)
                    current.name = _block_name(match[2]) or "1"
            current.take(piece[start:])
        if current.structural or not given:
            yield current.record(stem, blocks > 1)

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of texts with one structural data block each."""
        return parse_each(texts, lambda builder, row, text: _parse_one(builder, row, text, options.max_sites))


class _Block:
    """The text of one data block as it comes in."""

    def __init__(self, name: str, limit: int) -> None:
        self.name = name
        self._pieces: list[bytes] = []
        self._size = 0
        self._limit = limit
        self._structural = False

    def take(self, piece: bytes) -> None:
        """Add lines; what goes beyond the limit is counted, not kept."""
        if self._size <= self._limit:
            self._pieces.append(piece)
        self._size += len(piece)
        if self._size > self._limit and self._pieces:
            self._structural = self.structural
            self._pieces.clear()

    @property
    def structural(self) -> bool:
        """Whether a cell or sites are given in what was kept."""
        return self._structural or _STRUCTURAL.search(b"".join(self._pieces)) is not None

    @property
    def only_comments(self) -> bool:
        """Whether there is nothing but blank lines and comments."""
        return _COMMENTS.fullmatch(b"".join(self._pieces)) is not None

    def record(self, stem: str, several: bool) -> RawRecord:
        label = f"{stem}/{self.name}" if several else stem
        if self._size > self._limit:
            message = f"the data block has {self._size} bytes; the setting max_text_bytes allows {self._limit}"
            return RawRecord(label, None, {}, Refusal("text_too_long", message))
        text = decoded(b"".join(self._pieces))
        if not text.strip():
            return RawRecord(label, None, {}, Refusal("text_unreadable", "the file holds no data block"))
        return RawRecord(label, text, {})


def _block_name(raw: bytes) -> str:
    return clean_text(decoded(raw))


def _parse_one(builder: BatchBuilder, row: int, text: str, max_sites: int) -> None:
    block = _structural_block(text)
    cell = _cell(block)
    columns = _atom_columns(block)
    flags = columns.get("calc_flag")
    if flags is not None and "dum" in flags:
        columns = _kept(columns, [flag != "dum" for flag in flags])
    types, labels = columns.get("type_symbol"), columns.get("label")
    if types is not None and "." in types:
        columns = _kept(columns, [t != "." or (labels is not None and labels[i] != ".") for i, t in enumerate(types)])
        types, labels = columns.get("type_symbol"), columns.get("label")
    count = len(next(iter(columns.values()), []))
    if count == 0:
        raise StructureRefused("sites_missing", "no _atom_site rows with a real atom")
    check_count(count, max_sites)
    positions = _positions(columns, cell, block)
    check_coordinates(positions)
    symbols = _symbols(columns)
    occupancies = _occupancies(columns, count)
    operations = symmetry_of(block, cell)
    if operations is not None and len(operations) > 1:
        rows = np.array(positions, np.float64).reshape(-1, 3)
        full, index = expand(operations, cell, rows, occupancies or [1.0] * count, max_sites)
        positions = full.ravel().tolist()
        symbols = [symbols[i] for i in index]
        occupancies = [occupancies[i] for i in index] if occupancies else []
    if occupancies:
        positions, symbols = merge_mixed(cell, positions, symbols, occupancies)
    builder.add(row, cell, positions, symbols)


def _structural_block(text: str) -> gemmi.cif.Block:
    if "\0" in text:
        raise StructureRefused("text_unreadable", "the text holds NUL bytes")
    try:
        document = gemmi.cif.read_string(text.removeprefix("\ufeff"))
    except (ValueError, RuntimeError, TypeError) as error:
        raise StructureRefused("text_unreadable", f"not a CIF: {str(error).removeprefix('string:')}") from None
    if len(document) == 1:
        return document[0]
    if len(document) == 0:
        raise StructureRefused("text_unreadable", "the text holds no data block")
    structural = [b for b in document if _atom_columns(b)] or [b for b in document if b.find_value(_CELL[0])]
    if len(structural) > 1:
        raise StructureRefused("text_unreadable", f"{len(structural)} data blocks with sites in one text")
    return structural[0] if structural else document[0]


def _cell(block: gemmi.cif.Block) -> list[float]:
    values = [block.find_value(tag) for tag in _CELL]
    if not all(values):
        values = [v or block.find_value(tag) for v, tag in zip(values, _CELL_DOTTED, strict=True)]
    if not all(values) or not _UNKNOWN.isdisjoint(values):
        missing = [tag for v, tag in zip(values, _CELL, strict=True) if not v or v in _UNKNOWN]
        raise StructureRefused("cell_missing", f"no value for {', '.join(missing)}")
    numbers = _numbers(values)
    if not math.isfinite(sum(numbers)):
        bad = [f"{tag} {v}" for v, x, tag in zip(values, numbers, _CELL, strict=True) if not math.isfinite(x)]
        raise StructureRefused("cell_nonfinite", f"not a finite number: {', '.join(bad)}")
    return cell_of_parameters(*numbers)


def _numbers(values: Sequence[str]) -> list[float]:
    """Numbers of CIF values, a standard uncertainty in parentheses dropped; NaN where a value is no number."""
    try:
        # float() also takes digits with underscores, which are no number in a CIF.
        if "_" not in "".join(values):
            return list(map(float, values))
    except ValueError:
        pass
    return [gemmi.cif.as_number(gemmi.cif.as_string(v) if v[:1] in "'\"" else v) for v in values]


def _atom_columns(block: gemmi.cif.Block) -> dict[str, list[str]]:
    """The columns of the _atom_site category by what follows the category's name, in lower case; empty if none."""
    for tag in ("_atom_site_fract_x", "_atom_site_label", "_atom_site_type_symbol", "_atom_site_Cartn_x"):
        for spelled in (tag, tag.replace("_site_", "_site.")):
            loop = block.find_loop(spelled).get_loop()
            if loop is not None:
                values = loop.values
                width = loop.width()
                return {t.lower()[11:]: values[i::width] for i, t in enumerate(loop.tags)}
            if block.find_value(spelled):
                pairs = [item.pair for item in block if item.pair is not None]
                names = ("_atom_site_", "_atom_site.")
                return {t.lower()[11:]: [v] for t, v in pairs if t.lower().startswith(names)}
    return {}


def _kept(columns: dict[str, list[str]], keep: list[bool]) -> dict[str, list[str]]:
    return {name: [v for v, k in zip(values, keep, strict=True) if k] for name, values in columns.items()}


def _positions(columns: dict[str, list[str]], cell: list[float], block: gemmi.cif.Block) -> list[float]:
    """Flat fractional coordinates."""
    names = ("fract_x", "fract_y", "fract_z")
    cartesian = not any(n in columns for n in names) and "cartn_x" in columns
    if cartesian:
        names = ("cartn_x", "cartn_y", "cartn_z")
        if any(block.find_value(f"_atom_sites_{kind}_tran_matrix_11") for kind in ("Cartn", "fract")):
            raise StructureRefused("coordinates_missing", "only Cartesian coordinates, in axes of the file's own")
    found = [columns[n] for n in names if n in columns]
    if len(found) < 3:
        absent = ", ".join(f"_atom_site_{n}" for n in names if n not in columns)
        raise StructureRefused("coordinates_missing", f"the sites have no {absent}")
    count = len(found[0])
    values = found[0] + found[1] + found[2]
    if not _UNKNOWN.isdisjoint(values):
        at = next(i for i, v in enumerate(values) if v in _UNKNOWN)
        shown = f"site {at % count + 1} has {values[at]} for _atom_site_{names[at // count]}"
        raise StructureRefused("coordinates_missing", shown)
    numbers = _numbers(values)
    if not math.isfinite(sum(numbers)):
        at = max(range(len(numbers)), key=lambda i: abs(numbers[i]) if numbers[i] == numbers[i] else math.inf)
        shown = f"site {at % count + 1} has {values[at]} for _atom_site_{names[at // count]}"
        raise StructureRefused("coordinates_nonfinite", f"{shown}: not a finite number")
    flat = [0.0] * (3 * count)
    for k in range(3):
        flat[k::3] = numbers[k * count : (k + 1) * count]
    return fractional(cell, flat) if cartesian else flat


def _symbols(columns: dict[str, list[str]]) -> list[str]:
    types, labels = columns.get("type_symbol"), columns.get("label")
    if types is not None:
        symbols = list(map(_element_of_type, types))
    else:
        symbols = [None] * len(labels or next(iter(columns.values())))
    if None in symbols:
        for i, symbol in enumerate(symbols):
            if symbol is None:
                stated = types[i] if types is not None else "?"
                label = labels[i] if labels is not None else "?"
                found = _element_of_label(label) if stated in _UNKNOWN else None
                if found is None:
                    shown = f"type {stated}" if stated not in _UNKNOWN else f"label {label}"
                    raise StructureRefused("species_unknown", f"site {i + 1}: {shown} names no chemical element")
                symbols[i] = found
    return [s for s in symbols if s is not None]


@lru_cache(maxsize=4096)
def _element_of_type(text: str) -> str | None:
    """The element of an _atom_site_type_symbol such as Fe, FE or Fe3+."""
    match = re.fullmatch(r"([A-Za-z]{1,2})(?:[\d+\-.].*)?", gemmi.cif.as_string(text))
    return element_of(match[1], any_case=True) if match else None


@lru_cache(maxsize=4096)
def _element_of_label(text: str) -> str | None:
    """The element that a site label begins with, where the file states no type.

    The letters before the first other character are the element (Fe1, FE1), or begin with it and go on with a capital
    (OH1, CaM2). T alone is a tetrahedral site in such labels, not tritium.
    """
    match = re.match(r"[A-Za-z]+", gemmi.cif.as_string(text))
    if match is None or match[0] == "T":
        return None
    letters = match[0]
    if len(letters) <= 2:
        whole = element_of(letters, any_case=True)
        if whole is not None or len(letters) == 1:
            return whole
    if letters[1].islower():
        return element_of(letters[:2]) if letters[2:3].isupper() else None
    return element_of(letters[0]) if letters[0] != "T" else None


def _occupancies(columns: dict[str, list[str]], count: int) -> list[float]:
    """Occupancies of the rows; empty where all are 1, the default of the dictionary."""
    column = columns.get("occupancy")
    if column is None or _FULL.issuperset(column):
        return []
    values = [1.0 if v in _UNKNOWN else x for v, x in zip(column, _numbers([_known(v) for v in column]), strict=True)]
    for i, x in enumerate(values):
        if not 0 < x < float("inf"):
            raise StructureRefused("occupancy_invalid", f"site {i + 1} has the occupancy {column[i]}")
    return [] if all(x == 1.0 for x in values) else values


def _known(value: str) -> str:
    return "1" if value in _UNKNOWN else value
