"""The known answer of the demo collection: what every record is, and what must be found."""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from pathlib import Path

ABOUT = (
    "An invented collection: the survey of the island of Orrowen, which does not exist, by workflows that nobody ran. "
    "The structure types are textbook knowledge; which elements sit in them, the volumes, and all energies, splits and "
    "dates are made up. No number here is a measurement or a computed property of a material."
)


@dataclass(frozen=True, slots=True)
class DemoRecord:
    """One record of the collection, accepted or refused."""

    source: str
    file: str
    """Relative to the source's path; for a member of an archive followed by the path inside."""

    position: int
    """Place in its file, from 0."""

    label: str
    crystal: str | None
    """Name of the crystal; near misses are crystals of their own. None where the record is refused."""

    done: tuple[str, ...]
    """What was done to the crystal on its way into this record, for a person."""

    reason: str | None
    """Expected reason of the match with `same_as`."""

    grade: str | None
    """Strictest grade that joins the record with `same_as`; None for the first record of a crystal."""

    same_as: str | None
    """SOURCE:LABEL of the record it is to be found with."""

    key_class: str | None
    """Records of one class have one crystal key, those of two classes have two; None: not known (noise, few digits)."""

    refusal: str | None
    """Reason code for which the record is refused."""

    energy_ev_per_site: float | None = None
    theory: str | None = None
    split: str | None = None
    date: str | None = None


@dataclass(frozen=True, slots=True)
class Manifest:
    """All records in the order of sources, files and places, and what was planted among them."""

    records: tuple[DemoRecord, ...]
    mirror_images: dict[str, str]
    """Crystal and the crystal whose mirror image it is: one at `same` where mirror images are merged."""

    near_misses: dict[str, str]
    """Crystal and the crystal that it nearly is; the two are never one."""

    conflicts: tuple[str, ...]
    """SOURCE:LABEL of records whose energy disagrees, by 0.02 eV a site, with others of one crystal and theory."""

    totals: tuple[str, ...]
    """SOURCE:LABEL of records whose energy is of the whole cell where the others of the source are per site."""

    leaks: tuple[str, ...]
    """SOURCE:LABEL of records that stand in another split than the other records of their crystal."""

    def accepted(self) -> tuple[DemoRecord, ...]:
        """The records that are not refused."""
        return tuple(r for r in self.records if r.refusal is None)

    def refused(self) -> tuple[DemoRecord, ...]:
        """The records that are refused, each with its reason."""
        return tuple(r for r in self.records if r.refusal is not None)

    def write(self, path: Path) -> None:
        """Write everything as JSON, one record a line."""
        head = {"about": ABOUT, "records": len(self.records), "refused": len(self.refused())}
        planted = {
            "mirror_images": self.mirror_images,
            "near_misses": self.near_misses,
            "conflicts": self.conflicts,
            "totals": self.totals,
            "leaks": self.leaks,
        }
        lines = [json.dumps(asdict(r), ensure_ascii=False) for r in self.records]
        text = (
            "{" + json.dumps(head, indent=1)[1:-2] + ",\n" + json.dumps(planted, indent=1, ensure_ascii=False)[2:-2]
            + ',\n "list": [\n  ' + ",\n  ".join(lines) + "\n ]\n}\n"
        )  # fmt: skip
        path.write_text(text, encoding="utf-8", newline="\n")
