"""The command that lets a night come again: schedule, by a Prefect server, or as lines for cron or systemd."""

from __future__ import annotations

import os
import re
import shutil
import sys
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from lattice_census.errors import StoreError, UsageError

from .completion import one_of
from .options import (
    DEFAULT_STORE,
    EngineOption,
    PartsOption,
    QuietOption,
    SchedulerOption,
    SetOption,
    SettingsOption,
    StoreOption,
    WorkersOption,
    elsewhere,
    fail_on,
    seconds,
)
from .words import counted

if TYPE_CHECKING:
    from .night import Night


def register(app: typer.Typer) -> None:
    """Add the command of this module."""
    app.command("schedule")(schedule)


def schedule(
    paths: Annotated[list[Path], typer.Argument(metavar="PATH", help="Files or folders of structures.")],
    cron: Annotated[
        str,
        typer.Option("--cron", metavar="TIME", help="When: minute, hour, day of the month, month, day of the week."),
    ] = "0 2 * * *",
    zone: Annotated[
        str | None, typer.Option("--timezone", help="Whose clock, like Europe/Berlin [default: this machine's].")
    ] = None,
    name: Annotated[str | None, typer.Option("--name", help="Name of the schedule [default: the store's].")] = None,
    show: Annotated[
        str | None,
        typer.Option("--print", metavar="KEEPER", autocompletion=one_of("crontab", "systemd"),
 help="Serve nothing; print what crontab or systemd takes instead."),
    ] = None,
    store: StoreOption = DEFAULT_STORE,
    source: Annotated[
        str | None, typer.Option("--source", help="Name of the source [default: the PATH's own].")
    ] = None,
    export: Annotated[
        Path | None,
        typer.Option("--export", metavar="DIR", help="Export the kept records into this folder, a new one each night: "
                     "{time} in it is the time of the run."),
    ] = None,
    workers: WorkersOption = None,
    engine: EngineOption = None,
    scheduler: SchedulerOption = None,
    parts: PartsOption = None,
    wait: Annotated[
        float, typer.Option("--wait", metavar="SECONDS", callback=seconds, help="Wait so long for another run to end.")
    ] = 3600.0,
    settings: SettingsOption = None,
    assignments: SetOption = None,
    quiet: QuietOption = False,
    fails: Annotated[
        list[str] | None,
        typer.Option("--fail-on", metavar="WHAT", help="A night has failed when there are: rejects, findings."),
    ] = None,
) -> None:  # fmt: skip
    """Do what `run` does again and again: serve it to a Prefect server, or print it for cron or systemd."""
    from .crontab import crontab_line, parse_cron, systemd_units
    from .night import FAILS, Night, text_of

    when = parse_cron(cron)
    clock = zone if zone is not None else _local_zone()
    _check_zone(clock)
    called = name if name is not None else re.sub(r"[^\w.-]", "-", store.stem, flags=re.ASCII)
    if not re.fullmatch(r"[A-Za-z0-9][\w.-]{0,99}", called, re.ASCII):
        raise UsageError(f"--name {called!r}: give letters, digits, hyphens, points; at most 100.")
    night = Night(
        tuple(map(str, paths)), str(store), source, text_of(export), settings=text_of(settings),
        assignments=(*(assignments or ()), *elsewhere(engine, scheduler, parts)), workers=workers, wait=wait,
        fail_on=tuple(sorted(fail_on(fails, FAILS))), orchestrator=None,
    ).whole()  # fmt: skip
    _check(night)

    if show is not None:
        if show not in ("crontab", "systemd"):
            raise UsageError(f"--print {show}: choose from crontab, systemd.")
        if show == "crontab" and zone is not None and zone != _local_zone():
            raise UsageError(
                "A crontab goes by the clock of the machine: leave --timezone out, or print systemd units."
            )
        words = [_program(), *night.words(), "--direct", "--quiet"]
        if any("\n" in word for word in words):
            raise UsageError("A path or setting with a line break cannot stand in a crontab or unit file.")
        typer.echo(crontab_line(when, words) if show == "crontab" else systemd_units(when, zone, words, called))
        _warn_environment()
        return

    # Before Prefect is imported: what a night did, or why it failed, is to be read where it is served.
    os.environ.setdefault("PREFECT_LOGGING_LEVEL", "WARNING" if quiet else "INFO")
    from . import serving

    url = serving.server_url()

    def tell(deployment: str) -> None:
        if not quiet:
            typer.echo(
                f"Serving {deployment} to {url}: at {when.text!r} by the clock of {clock}, "
                f"{counted(len(paths), 'PATH')} into {night.store}.\nRun it now: prefect deployment run {deployment}\n"
                "Ctrl-C ends it and pauses the schedule; the same command goes on.",
                err=True,
            )

    serving.serve(night, serving.cron_schedule(when.text, clock), called, tell)
    if not quiet:
        typer.echo(f"Ended; the schedule of {called} is paused.", err=True)


def _check(night: Night) -> None:
    """Everything that can be known now and not only at night: paths, settings, export folder, store."""
    from .night import export_folder

    for path in night.paths:
        if not Path(path).exists():
            raise UsageError(f"There is no file or folder {path}.")
    if night.source is not None and len(night.paths) > 1:
        raise UsageError("--source names one source: give one PATH with it.")
    if night.export is not None and "{time}" not in night.export:
        raise UsageError(
            f"--export {night.export}: every night needs a new folder; put {{time}} into its name, "
            "like --export 'clean/{time}'."
        )
    export_folder(night)
    night.resolved()
    store = Path(night.store)
    if store.exists():
        from lattice_census.store.connect import open_for_reading

        open_for_reading(store).close()
    for folder in (store.parent, store.with_name(store.name + ".work")):
        if folder == store.parent or folder.exists():
            try:
                with tempfile.TemporaryFile(dir=folder):
                    pass
            except OSError as error:
                raise StoreError(f"{folder} cannot be written ({error.strerror}), so {store} cannot be.") from error


def _local_zone() -> str:
    """The IANA name of this machine's time zone; UTC where it does not tell."""
    named = os.environ.get("TZ", "").removeprefix(":")
    if named and "/" in named and not named.startswith("/"):
        return named
    target = Path("/etc/localtime").resolve().as_posix()
    return target.split("/zoneinfo/", 1)[1] if "/zoneinfo/" in target else "UTC"


def _check_zone(zone: str) -> None:
    from zoneinfo import ZoneInfo

    try:
        ZoneInfo(zone)
    except (ValueError, OSError, KeyError) as error:
        raise UsageError(f"--timezone {zone}: there is no such time zone; give one like Europe/Berlin.") from error


def _program() -> str:
    """The whole path of the command, since cron knows no virtual environment."""
    beside = Path(sys.executable).with_name("lattice-census")
    return str(beside) if beside.exists() else shutil.which("lattice-census") or "lattice-census"


def _warn_environment() -> None:
    """Settings of this shell's environment are not in the line that is printed."""
    names = sorted(n for n in os.environ if n.startswith("LATTICE_CENSUS_") and n != "LATTICE_CENSUS_STORE")
    if names:
        typer.echo(f"Not in what is printed, though set in this shell: {', '.join(names)}.", err=True)
