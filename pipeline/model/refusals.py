"""Why a record is refused: stable codes, each with its meaning. A refused record is data, not a log line."""

from __future__ import annotations

from dataclasses import dataclass

REASONS: dict[str, str] = {
    "file_unreadable": "the file cannot be opened, decompressed or decoded",
    "text_unreadable": "the structure text breaks the grammar of its format, or ends too early",
    "text_missing": "the row has no structure text",
    "cell_missing": "one or more of the cell parameters or vectors are missing",
    "cell_nonfinite": "a cell parameter is not a finite number",
    "cell_zero": "the cell has no volume",
    "cell_absurd": "an edge under 0.5 or over 10,000 angstrom, impossible angles, or a cell far too flat to be meant",
    "sites_missing": "the record has no sites",
    "coordinates_missing": "a site lacks a coordinate",
    "coordinates_nonfinite": "a coordinate is not a finite number, or lies absurdly far outside the cell",
    "species_unknown": "a site names no chemical element",
    "occupancy_invalid": "an occupancy is not a number above 0, or the elements of a site add up to more than 1",
    "sites_overlap": "two sites are closer than the overlap distance and are not one mixed site",
    "sites_too_many": "more sites than the setting max_sites allows",
    "symmetry_unreadable": "the symmetry operations or the space-group name cannot be understood",
    "periodicity_unsupported": "periodic in fewer than two directions",
    "layer_unclear": "a layer whose heights are not known: no clear gap along its normal, or over 500 angstrom thick",
    "archive_unsafe": "an archive member with a path outside the archive, a link, or over the limits on size and ratio",
    "text_too_long": "the structure text is longer than the setting max_text_bytes allows",
    "reduction_failed": "the cell reduction did not reach a form that its own predicate accepts",
}


@dataclass(frozen=True, slots=True)
class Refusal:
    """One refused record."""

    reason: str
    """A key of REASONS."""

    message: str
    """What was met and where, for a person."""

    stage: str = "parse"
    """`read` (file), `parse` (text to structure), or `canonical` (cell reduction)."""

    def __post_init__(self) -> None:
        if self.reason not in REASONS:
            raise ValueError(f"unknown refusal reason {self.reason!r}")
