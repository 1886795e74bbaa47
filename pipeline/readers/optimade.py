"""Entries of the OPTIMADE specification: JSON lines with a header, or the pages of an API.

A structure is the attributes of an entry of type `structures`. What the specification lets a provider leave out (null
vectors, positions, species) is refused by name.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Sequence
from itertools import chain, islice
from typing import BinaryIO

from ..model.raw import FileRefused, Parsed, ParseOptions, RawRecord, SplitOptions
from ..model.refusals import Refusal
from ..model.species import OccupancyError, element_of, token_of
from .layers import oriented_cell
from .sites import (
    BatchBuilder,
    StructureRefused,
    check_coordinates,
    check_count,
    check_vectors,
    fractional,
    parse_each,
)
from .streams import lines_of
from .tables import label_of, plain

DOCUMENT_BYTES = 100_000_000
"""The largest JSON document (API pages that are not one a line), which has to be read whole."""

_STRUCTURAL = (
    "lattice_vectors",
    "cartesian_site_positions",
    "fractional_site_positions",
    "species",
    "species_at_sites",
    "dimension_types",
    "nperiodic_dimensions",
    "nsites",
    "structure_features",
    "site_coordinate_span",
)


class OptimadeReader:
    """Entries in the order of the file."""

    name = "optimade"

    def split(self, stream: BinaryIO, stem: str, options: SplitOptions) -> Iterator[RawRecord]:
        """One record an entry; header, info lines and entries of other types are passed over.

        A line that is no JSON is refused alone. A document that is no JSON, or too long, ends the file (FileRefused).
        """
        lines = lines_of(stream, DOCUMENT_BYTES)
        number = 0
        begin = list(islice((line for line in lines if line.strip()), 2))
        if any(map(_is_json, begin)) and begin[0].rstrip()[-1:] == b"}":
            for line in chain(begin, lines):
                if not line.strip():
                    continue
                try:
                    document: object = json.loads(line.decode())
                except (ValueError, RecursionError) as error:
                    number += 1
                    message = f"a line is no JSON: {error}"
                    yield RawRecord(f"row {number}", None, {}, Refusal("text_unreadable", message))
                    continue
                for entry in _entries(document):
                    number += 1
                    yield _record(entry, number, options.max_text_bytes)
            return
        held, size = begin, sum(map(len, begin))
        for line in lines:
            size += len(line)
            if size > DOCUMENT_BYTES:
                message = f"the JSON document is longer than {DOCUMENT_BYTES} bytes: give its entries one a line"
                raise FileRefused(Refusal("text_too_long", message, "read"))
            held.append(line)
        try:
            document = json.loads(b"".join(held).decode())
        except (ValueError, RecursionError) as error:
            raise FileRefused(Refusal("text_unreadable", f"no JSON document: {error}", "read")) from None
        for entry in _entries(document):
            number += 1
            yield _record(entry, number, options.max_text_bytes)

    def parse(self, texts: Sequence[str | None], options: ParseOptions) -> Parsed:
        """Crystals of texts that hold the attributes of one entry each (or a whole entry)."""
        return parse_each(texts, lambda builder, row, text: _parse_one(builder, row, text, options.max_sites))


def _is_json(line: bytes) -> bool:
    try:
        json.loads(line)
    except (ValueError, RecursionError):
        return False
    return True


def _entries(document: object) -> Iterator[object]:
    """The structure entries of a line, a page, or a list of either."""
    if isinstance(document, list):
        for item in document:
            yield from _entries(item)
    elif not isinstance(document, dict):
        yield document
    elif "x-optimade" in document:
        return
    elif isinstance(document.get("data"), list | dict):
        yield from _entries(document["data"])
    elif _is_structure(document):
        yield document


def _is_structure(item: dict[str, object]) -> bool:
    if item.get("type", "structures") != "structures":
        return False
    return "attributes" in item or "id" in item or "lattice_vectors" in item


def _record(entry: object, number: int, limit: int) -> RawRecord:
    if not isinstance(entry, dict):
        refusal = Refusal("text_unreadable", f"entry {number} is {type(entry).__name__}, not an object")
        return RawRecord(f"row {number}", None, {}, refusal)
    label = label_of(entry.get("id"), number)
    attributes = entry.get("attributes", entry)
    if not isinstance(attributes, dict):
        return RawRecord(label, None, {}, Refusal("text_missing", "the entry has no attributes"))
    text = json.dumps({k: attributes[k] for k in _STRUCTURAL if k in attributes}, separators=(",", ":"))
    properties = {
        str(k): plain(v) for k, v in attributes.items() if k not in _STRUCTURAL and k not in ("id", "type", "links")
    }
    if len(text) > limit:
        refusal = Refusal("text_too_long", f"{len(text)} characters; the setting max_text_bytes allows {limit}")
        return RawRecord(label, None, properties, refusal)
    return RawRecord(label, text, properties)


def _parse_one(builder: BatchBuilder, row: int, text: str, max_sites: int) -> None:
    try:
        attributes = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise StructureRefused("text_unreadable", f"no JSON: {error}") from None
    if isinstance(attributes, dict) and isinstance(attributes.get("attributes"), dict):
        attributes = attributes["attributes"]
    if not isinstance(attributes, dict):
        raise StructureRefused("text_unreadable", "the JSON text is not an object")
    periodic = _periodic(attributes)
    vectors = _vectors(attributes.get("lattice_vectors"), periodic)
    sites = attributes.get("species_at_sites")
    if not isinstance(sites, list):
        raise StructureRefused("species_unknown", "no species_at_sites")
    check_count(len(sites), max_sites)
    _check_complete(attributes, len(sites))
    tokens_by_name = _tokens(attributes.get("species"))
    positions = attributes.get("cartesian_site_positions")
    is_fractional = positions is None and attributes.get("fractional_site_positions") is not None
    name = "fractional_site_positions" if is_fractional else "cartesian_site_positions"
    flat = _coordinates(attributes.get(name), name, len(sites))
    if is_fractional:
        if not all(periodic):
            raise StructureRefused("coordinates_missing", "no cartesian_site_positions of a layer")
        cell, periodicity = vectors, 3
        check_vectors(cell)
    else:
        cell, periodicity = oriented_cell(vectors, periodic, flat)
        check_vectors(cell)
        flat = fractional(cell, flat)
    check_coordinates(flat)
    tokens: list[str] = []
    kept: list[float] = []
    for i, site in enumerate(sites):
        token = tokens_by_name.get(site) if isinstance(site, str) else None
        if token is None:
            raise StructureRefused("species_unknown", f"site {i + 1} is of species {site!r}, which is not described")
        if isinstance(token, StructureRefused):
            raise token
        if token:
            tokens.append(token)
            kept.extend(flat[3 * i : 3 * i + 3])
    check_count(len(tokens), max_sites)
    builder.add(row, cell, kept, tokens, periodicity)


def _periodic(attributes: dict[str, object]) -> list[bool]:
    types = attributes.get("dimension_types")
    if types is None:
        count = attributes.get("nperiodic_dimensions")
        if count in (None, 3):
            return [True, True, True]
        raise StructureRefused("periodicity_unsupported", f"nperiodic_dimensions is {count} and no dimension_types")
    if not isinstance(types, list) or len(types) != 3 or not all(t in (0, 1) for t in types):
        raise StructureRefused("text_unreadable", f"dimension_types is {types!r}")
    return [bool(t) for t in types]


def _vectors(value: object, periodic: list[bool]) -> list[float]:
    """Nine numbers; a null vector of an aperiodic direction is zero."""
    if not isinstance(value, list) or len(value) != 3:
        raise StructureRefused("cell_missing", "no lattice_vectors")
    cell: list[float] = []
    for row, repeats in zip(value, periodic, strict=True):
        if not repeats and (row is None or (isinstance(row, list) and row == [None] * 3)):
            cell.extend((0.0, 0.0, 0.0))
        elif not isinstance(row, list) or len(row) != 3 or None in row:
            raise StructureRefused("cell_missing", f"one of the lattice_vectors is {str(row)[:60]}")
        else:
            cell.extend(_number(x, "cell_nonfinite", "lattice_vectors") for x in row)
    return cell


def _number(value: object, reason: str, name: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise StructureRefused(reason, f"{name} holds {str(value)[:40]!r}, not a number")
    try:
        return float(value)
    except OverflowError:
        raise StructureRefused(reason, f"{name} holds a number beyond all bounds") from None


def _check_complete(attributes: dict[str, object], sites: int) -> None:
    features = attributes.get("structure_features")
    if isinstance(features, list):
        if "implicit_atoms" in features:
            raise StructureRefused("coordinates_missing", "structure_features: implicit_atoms, so sites are left out")
        if "assemblies" in features:
            raise StructureRefused("occupancy_invalid", "structure_features: assemblies, so sites exclude each other")
        if "site_attachments" in features:
            raise StructureRefused("coordinates_missing", "structure_features: site_attachments without positions")
    span = attributes.get("site_coordinate_span")
    if span not in (None, "unit_cell"):
        raise StructureRefused("coordinates_missing", f"site_coordinate_span is {span!r}: not the sites of a unit cell")
    stated = attributes.get("nsites")
    if stated is not None and stated != sites:
        raise StructureRefused("coordinates_missing", f"nsites is {stated} and {sites} sites are given")


def _coordinates(value: object, name: str, sites: int) -> list[float]:
    if not isinstance(value, list):
        raise StructureRefused("coordinates_missing", f"no {name}")
    if len(value) != sites:
        raise StructureRefused("coordinates_missing", f"{len(value)} {name} for {sites} species_at_sites")
    flat: list[float] = []
    for i, row in enumerate(value):
        if not isinstance(row, list) or len(row) != 3 or None in row:
            raise StructureRefused("coordinates_missing", f"site {i + 1} of {name} is {str(row)[:60]}")
        flat.extend(_number(x, "coordinates_nonfinite", name) for x in row)
    return flat


def _tokens(value: object) -> dict[str, str | StructureRefused]:
    """The token of each species by its name; empty for a vacancy; a refusal where a site of it has to be refused."""
    if not isinstance(value, list):
        raise StructureRefused("species_unknown", "no species")
    tokens: dict[str, str | StructureRefused] = {}
    for species in value:
        if not isinstance(species, dict) or not isinstance(species.get("name"), str):
            raise StructureRefused("species_unknown", f"one of the species is {str(species)[:60]}")
        try:
            tokens[species["name"]] = _token(species)
        except StructureRefused as refused:
            tokens[species["name"]] = refused
    return tokens


def _token(species: dict[str, object]) -> str:
    name, symbols, shares = species["name"], species.get("chemical_symbols"), species.get("concentration")
    if not isinstance(symbols, list) or not isinstance(shares, list) or len(symbols) != len(shares) or not symbols:
        raise StructureRefused("species_unknown", f"species {name!r} lacks chemical_symbols or concentration")
    if species.get("attached"):
        raise StructureRefused("coordinates_missing", f"species {name!r} has attached atoms without positions")
    parts: list[tuple[str, float]] = []
    for symbol, share in zip(symbols, shares, strict=True):
        if symbol == "vacancy":
            continue
        element = element_of(symbol) if isinstance(symbol, str) else None
        if element is None:
            raise StructureRefused(
                "species_unknown", f"species {name!r} holds {symbol!r}, which is no chemical element"
            )
        parts.append((element, _number(share, "occupancy_invalid", "concentration")))
    if not parts:
        return ""
    try:
        return token_of(parts)
    except OccupancyError as error:
        raise StructureRefused("occupancy_invalid", f"species {name!r}: {error}") from None
