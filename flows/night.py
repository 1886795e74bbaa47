"""A night: everything that `run` is asked for, as plain values that a schedule can keep, and the work itself."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from lattice_census.errors import UsageError

if TYPE_CHECKING:
    from lattice_census.ingest.progress import Progress, Step
    from lattice_census.settings import Settings

FAILS = ("rejects", "findings")
"""What --fail-on of a night may name."""


@dataclass(frozen=True, slots=True)
class Night:
    """What one night is to do. Strings and numbers only, so that it can be given to a server."""

    paths: tuple[str, ...]
    store: str
    source: str | None = None
    export: str | None = None
    """Folder of the export; {time} in it becomes the time of the run, UTC."""

    recompute: bool = False
    settings: str | None = None
    assignments: tuple[str, ...] = ()
    workers: int | None = None
    orchestrator: str | None = None
    wait: float = 0.0
    fail_on: tuple[str, ...] = ()

    def whole(self) -> Night:
        """The same with whole paths, for a process that starts elsewhere."""
        return Night(
            **{
                **asdict(self),
                "paths": tuple(str(Path(p).absolute()) for p in self.paths),
                "store": str(Path(self.store).absolute()),
                "export": self.export and str(Path(self.export).absolute()),
                "settings": self.settings and str(Path(self.settings).absolute()),
            }
        )

    def words(self) -> list[str]:
        """The command line of `lattice-census` that does the same."""
        words = ["run", *self.paths, "--store", self.store]
        for option, value in (
            ("--source", self.source),
            ("--export", self.export),
            ("--settings", self.settings),
            ("--workers", self.workers),
            ("--fail-on", ",".join(self.fail_on) or None),
            ("--wait", f"{self.wait:g}" if self.wait else None),
        ):
            words += [] if value is None else [option, str(value)]
        for text in self.assignments:
            words += ["--set", text]
        words += ["--recompute"] if self.recompute else []
        words += ["--direct"] if self.orchestrator == "direct" else []
        return words

    def resolved(self) -> Settings:
        """The settings in force for it."""
        from .options import settings_from

        options = {"workers": self.workers, "orchestrator": self.orchestrator}
        file = Path(self.settings) if self.settings else None
        return settings_from(file, list(self.assignments), Path(self.store), options)


def text_of(path: Path | None) -> str | None:
    """A path as a plain value."""
    return None if path is None else str(path)


def export_folder(night: Night) -> Path | None:
    """The folder that is exported into, if any. Raises UsageError where it is there: before the work, not after it."""
    if night.export is None:
        return None
    folder = Path(night.export.replace("{time}", f"{datetime.now(UTC):%Y-%m-%dT%H%M%SZ}"))
    if folder.exists():
        raise UsageError(f"{folder} exists already: --export writes into a new folder.")
    return folder


def run_night(night: Night, settings: Settings, step: Step, progress: Progress) -> dict[str, Any]:
    """Ingest, group, keep, publish, and export where that is asked for; the counts of each."""
    from lattice_census.ingest.scan import IngestRequest

    from .group import night as steps
    from .ingest import IngestJob

    folder = export_folder(night)
    request = IngestRequest(tuple(Path(p) for p in night.paths), night.source, {}, night.recompute)
    counts = steps(IngestJob(Path(night.store), request, settings, night.wait), step, progress)
    return {**counts, "export": None if folder is None else step("export", _export, Path(night.store), folder)}


def _export(store: Path, folder: Path) -> dict[str, Any]:
    from lattice_census.output.export import export
    from lattice_census.store.connect import open_for_reading

    connection = open_for_reading(store)
    try:
        done = export(connection, folder)
    finally:
        connection.close()
    return {"kept": done.kept, "set_aside": done.set_aside, "folder": str(folder)}


def occurred(night: Night, counts: dict[str, Any]) -> list[str]:
    """Those of --fail-on that there are."""
    there = {"rejects": bool(counts["ingest"].get("rejected")), "findings": "findings" in night.fail_on
             and findings_of(Path(night.store)) > 0}  # fmt: skip
    return [word for word in night.fail_on if there[word]]


def findings_of(store: Path) -> int:
    """How many findings the published store holds."""
    from lattice_census.store.connect import open_for_reading
    from lattice_census.store.rows import one_number

    connection = open_for_reading(store)
    try:
        return one_number(connection, "SELECT count(*) FROM findings")
    finally:
        connection.close()
