"""Options that commands share, and what they mean together. Imports nothing heavy."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from lattice_census.errors import StoreError, UsageError

if TYPE_CHECKING:
    from lattice_census.settings import Settings

StoreOption = Annotated[
    Path, typer.Option("--store", envvar="LATTICE_CENSUS_STORE", help="The store, a DuckDB file.", show_envvar=False)
]
SettingsOption = Annotated[
    Path | None, typer.Option("--settings", envvar="LATTICE_CENSUS_SETTINGS", help="Settings, a TOML file.",
                              show_envvar=False)
]  # fmt: skip
SetOption = Annotated[
    list[str] | None, typer.Option("--set", metavar="NAME=VALUE", help="One setting; may be given several times.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print the result as JSON.")]
QuietOption = Annotated[bool, typer.Option("--quiet", help="No progress and no remarks on stderr.")]


def seconds(value: float) -> float:
    """A time to wait, checked."""
    if not 0 <= value <= 1e7:  # also false for a value that is no number
        raise UsageError(f"--wait {value:g}: give seconds, 0 or more.")
    return value


WaitOption = Annotated[
    float, typer.Option("--wait", metavar="SECONDS", callback=seconds, help="Wait so long for another run to end.")
]
DirectOption = Annotated[bool, typer.Option("--direct", help="Run without Prefect, with the same functions.")]
WorkersOption = Annotated[int | None, typer.Option("--workers", help="Worker processes [default: one a core].")]
EngineOption = Annotated[
    str | None, typer.Option("--engine", metavar="ENGINE", help="Who does the work: processes (here), or dask.")
]
SchedulerOption = Annotated[
    str | None,
    typer.Option("--scheduler", metavar="ADDRESS", help="Dask scheduler [default: workers on this machine]."),
]
PartsOption = Annotated[
    str | None,
    typer.Option("--parts", metavar="PLACE", help="Folder or URL, seen by every worker, for parts on their way."),
]
FailOnOption = Annotated[
    list[str] | None,
    typer.Option("--fail-on", metavar="WHAT", help="Exit with 1 where there are some: rejects or findings."),
]


def elsewhere(engine: str | None, scheduler: str | None, parts: str | None) -> list[str]:
    """The options of an engine as settings in the form NAME=VALUE, a folder as a whole path."""
    if parts and "://" not in parts:
        parts = str(Path(parts).expanduser().absolute())
    given = {"engine": engine, "scheduler": scheduler, "parts": parts}
    return [f"{name}={json.dumps(value)}" for name, value in given.items() if value is not None]


DEFAULT_STORE = Path("census.duckdb")


def settings_from(
    file: Path | None, assignments: list[str] | None, store: Path, options: dict[str, Any] | None = None
) -> Settings:
    """Settings by their precedence; what the store holds is read from its work folder or the published file."""
    from lattice_census.settings import resolve_settings
    from lattice_census.store.stages import settings_of_store

    if store.is_dir():
        raise StoreError(f"{store} is a folder; --store names a file.")
    if not store.absolute().parent.is_dir():
        raise UsageError(f"--store {store}: there is no folder {store.absolute().parent}. Make it, or give another.")
    given = dict(options or {})
    for text in assignments or []:
        name, equals, value = text.partition("=")
        if not equals or not name.strip():
            raise UsageError(f"--set {text}: give it as NAME=VALUE.")
        given[name.strip()] = _value(value.strip())
    return resolve_settings(given, file=file, stored=settings_of_store(store))


def _value(text: str) -> Any:
    try:
        return json.loads(text)
    except ValueError:
        return text


def fail_on(asked: list[str] | None, allowed: tuple[str, ...]) -> set[str]:
    """The words of --fail-on; UsageError for one that is none."""
    words = {word.strip() for text in asked or [] for word in text.split(",") if word.strip()}
    unknown = sorted(words - set(allowed))
    if unknown:
        raise UsageError(f"--fail-on {', '.join(unknown)}: choose from {', '.join(allowed)}.")
    return words
