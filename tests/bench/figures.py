"""What a part of the benchmark gives back: figures with unit, spread, and what is to be reached; and as a table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any


@dataclass(frozen=True, slots=True)
class Options:
    """What a part is asked for; every part has sizes of its own for what is left open."""

    file: Path | None = None
    """A real collection in place of an invented one."""

    records: int | None = None
    repeat: int | None = None
    workers: int = 2
    scratch: Path = Path()
    """A folder for collections and stores; what is there already is used again where it is the same."""

    def count(self, default: int) -> int:
        """How many records."""
        return self.records or default

    def times(self, default: int) -> int:
        """How often a timing is taken."""
        return self.repeat or default


@dataclass(frozen=True, slots=True)
class Figure:
    """One number, the median where it was taken several times."""

    what: str
    value: float
    unit: str
    least: float | None = None
    greatest: float | None = None
    reach: float | None = None
    """What is to be reached, in the same unit; None: nothing is asked."""

    at_least: bool = False
    """`reach` is a lower limit."""

    @property
    def reached(self) -> bool | None:
        """Whether the value is as good as asked."""
        if self.reach is None:
            return None
        return self.value >= self.reach if self.at_least else self.value <= self.reach


@dataclass(frozen=True, slots=True)
class Report:
    """What one part gives back."""

    part: str
    sizes: dict[str, Any]
    """What it ran on."""

    figures: tuple[Figure, ...]
    details: dict[str, Any] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """Ready for json.dumps."""
        told = []
        for f in self.figures:
            one: dict[str, Any] = {"what": f.what, "value": f.value, "unit": f.unit}
            if f.least is not None:
                one |= {"least": f.least, "greatest": f.greatest}
            if f.reach is not None:
                one |= {"reach": f"{'>=' if f.at_least else '<='} {f.reach:g}", "reached": f.reached}
            told.append(one)
        return {"part": self.part, "sizes": self.sizes, "figures": told, "details": self.details}


COLUMNS = ("part", "what", "value", "least", "greatest", "unit", "reach", "reached")


def table(reports: Sequence[Report], wrong: Sequence[tuple[str, str]] = ()) -> str:
    """All figures, one a line, numbers with four significant digits; then what the parts ran on, and what is wrong."""
    rows = [COLUMNS]
    for report in reports:
        for f in report.figures:
            reach = "" if f.reach is None else f"{'>=' if f.at_least else '<='} {f.reach:.4g}"
            reached = {None: "", True: "yes", False: "NO"}[f.reached]
            rows.append(
                (report.part, f.what, _four(f.value), _four(f.least), _four(f.greatest), f.unit, reach, reached)
            )
    widths = [max(len(row[i]) for row in rows) for i in range(len(COLUMNS))]
    lines = ["  ".join(_padded(row, widths)).rstrip() for row in rows]
    lines.insert(1, "  ".join("-" * w for w in widths))
    lines += ["", *(f"{r.part}: " + ", ".join(f"{k} {v}" for k, v in r.sizes.items()) for r in reports)]
    lines += [f"WRONG ANSWER in {part}: {message}" for part, message in wrong]
    return "\n".join(lines)


def _padded(row: Sequence[str], widths: Sequence[int]) -> list[str]:
    return [c.rjust(w) if 2 <= i <= 4 else c.ljust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))]


def _four(value: float | None) -> str:
    if value is None:
        return ""
    return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:.4g}"
