"""Commands that write to a store: ingest, withdraw, undo, run, demo."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from .completion import source_names
from .driving import drive
from .options import (
    DEFAULT_STORE,
    DirectOption,
    EngineOption,
    FailOnOption,
    JsonOption,
    PartsOption,
    QuietOption,
    SchedulerOption,
    SetOption,
    SettingsOption,
    StoreOption,
    WaitOption,
    WorkersOption,
    elsewhere,
    fail_on,
    settings_from,
)
from .words import counted

if TYPE_CHECKING:
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import Settings

PathsArgument = Annotated[list[Path], typer.Argument(metavar="PATH", help="Files or folders of structures.")]
SourceOption = Annotated[str | None, typer.Option("--source", help="Name of the source [default: the PATH's own].")]
IdColumn = Annotated[str | None, typer.Option("--id-column", help="Column of the label.")]
StructureColumn = Annotated[str | None, typer.Option("--structure-column", help="Column of the structure text.")]
EnergyColumn = Annotated[str | None, typer.Option("--energy-column", help="Column or key of the energy.")]
EnergyUnit = Annotated[
    str | None, typer.Option("--energy-unit", help="eV, Ha, Ry, kJ/mol (of the given cell) or eV/site.")
]
Theory = Annotated[str | None, typer.Option("--theory", help="Level of theory of all records.")]
TheoryColumn = Annotated[str | None, typer.Option("--theory-column", help="Column or key of the level of theory.")]
SplitColumn = Annotated[str | None, typer.Option("--split-column", help="Column or key of the set (train, test ...).")]
DateColumn = Annotated[str | None, typer.Option("--date-column", help="Column or key of the record's own date.")]
RecomputeOption = Annotated[
    bool, typer.Option("--recompute", help="Compute anew what a changed setting makes out of date.")
]
DryRunOption = Annotated[bool, typer.Option("--dry-run", help="Print the counts alone; change nothing.")]


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("ingest")(ingest)
    app.command("group")(group)
    app.command("run")(run)
    app.command("withdraw")(withdraw)
    app.command("undo")(undo)
    app.command("demo")(demo)


def ingest(
    paths: PathsArgument,
    store: StoreOption = DEFAULT_STORE,
    source: SourceOption = None,
    id_column: IdColumn = None,
    structure_column: StructureColumn = None,
    energy_column: EnergyColumn = None,
    energy_unit: EnergyUnit = None,
    theory: Theory = None,
    theory_column: TheoryColumn = None,
    split_column: SplitColumn = None,
    date_column: DateColumn = None,
    recompute: RecomputeOption = False,
    dry_run: DryRunOption = False,
    direct: DirectOption = False,
    workers: WorkersOption = None,
    engine: EngineOption = None,
    scheduler: SchedulerOption = None,
    parts: PartsOption = None,
    wait: WaitOption = 0.0,
    settings: SettingsOption = None,
    assignments: SetOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
    fails: FailOnOption = None,
) -> int:
    """Read structures into the store, each in its canonical cell; refuse what cannot be read, by name."""
    failing = fail_on(fails, ("rejects",))
    from .ingest import IngestJob
    from .ingest import ingest as steps

    request = _request(
        paths, source, recompute, id_column=id_column, structure_column=structure_column, energy_column=energy_column,
        energy_unit=energy_unit, theory=theory, theory_column=theory_column, split_column=split_column,
        date_column=date_column,
    )  # fmt: skip
    told = [*(assignments or []), *elsewhere(engine, scheduler, parts)]
    resolved = _resolved(store, settings, told, direct, workers)
    job = IngestJob(store, request, resolved, wait, dry_run)
    way = "direct" if dry_run else resolved.orchestrator  # what changes nothing is no flow to look back on
    counts = drive("ingest", way, quiet, store, lambda step, progress: steps(job, step, progress))
    typer.echo(json.dumps(counts) if as_json else ingest_text(counts, dry_run))
    return 1 if "rejects" in failing and counts.get("rejected") else 0


def group(
    store: StoreOption = DEFAULT_STORE,
    everything: Annotated[bool, typer.Option("--all", help="Every composition, not only those that changed.")] = False,
    recompute: RecomputeOption = False,
    direct: DirectOption = False,
    workers: WorkersOption = None,
    engine: EngineOption = None,
    scheduler: SchedulerOption = None,
    parts: PartsOption = None,
    wait: WaitOption = 0.0,
    settings: SettingsOption = None,
    assignments: SetOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
    fails: FailOnOption = None,
) -> int:
    """Find the records that are the same crystal: verified matches, families, groups, findings."""
    failing = fail_on(fails, ("findings",))
    from .group import GroupJob
    from .group import group as steps
    from .night import findings_of

    told = [*(assignments or []), *elsewhere(engine, scheduler, parts)]
    resolved = _resolved(store, settings, told, direct, workers)
    job = GroupJob(store, resolved, everything, recompute, wait)
    counts = drive(
        "group", resolved.orchestrator, quiet, store, lambda step, progress: steps(job, step, progress), must_exist=True
    )
    typer.echo(json.dumps(counts) if as_json else group_text(counts))
    return 1 if "findings" in failing and findings_of(store) else 0


def run(
    paths: PathsArgument,
    store: StoreOption = DEFAULT_STORE,
    source: SourceOption = None,
    export: Annotated[
        Path | None,
        typer.Option(
            "--export",
            metavar="DIR",
            help="Export the kept records into this new folder; {time} in it is the time of the run.",
        ),
    ] = None,
    recompute: RecomputeOption = False,
    direct: DirectOption = False,
    workers: WorkersOption = None,
    engine: EngineOption = None,
    scheduler: SchedulerOption = None,
    parts: PartsOption = None,
    wait: WaitOption = 0.0,
    settings: SettingsOption = None,
    assignments: SetOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
    fails: FailOnOption = None,
) -> int:
    """What a night does: ingest, group, keep, and, where a folder is given, export."""
    from .night import FAILS, Night, occurred, run_night, text_of

    night = Night(
        tuple(map(str, paths)), str(store), source, text_of(export), recompute, text_of(settings),
        (*(assignments or ()), *elsewhere(engine, scheduler, parts)), workers,
        "direct" if direct else None, wait, tuple(sorted(fail_on(fails, FAILS))),
    )  # fmt: skip
    resolved = night.resolved()
    counts = drive(
        "run", resolved.orchestrator, quiet, store, lambda step, progress: run_night(night, resolved, step, progress)
    )
    typer.echo(json.dumps(counts) if as_json else night_text(counts))
    return 1 if occurred(night, counts) else 0


def night_text(counts: dict[str, Any]) -> str:
    """The counts of a night in sentences."""
    from .curating import keep_text

    read = {**counts["ingest"], "compositions_waiting": 0}  # grouped right after
    lines = [ingest_text(read, False), group_text(counts["group"]), keep_text(counts["keep"])]
    if counts["export"]:
        told = counts["export"]
        lines.append(f"Exported to {told['folder']}: {told['kept']:,} kept, {told['set_aside']:,} set aside.")
    return "\n".join(lines)


def _request(paths: list[Path], source: str | None, recompute: bool, **source_settings: Any) -> IngestRequest:
    from pydantic import ValidationError

    from lattice_census.errors import UsageError
    from lattice_census.ingest.scan import IngestRequest
    from lattice_census.settings import SourceSettings

    given = {name: value for name, value in source_settings.items() if value is not None}
    try:
        SourceSettings.model_validate(given)
    except ValidationError as error:
        first = error.errors()[0]
        option = "--" + str(first["loc"][0]).replace("_", "-")
        raise UsageError(f"{option} {first['input']}: {first['msg']}.") from error
    return IngestRequest(tuple(paths), source, given, recompute)


def _resolved(
    store: Path, settings: Path | None, assignments: list[str] | None, direct: bool, workers: int | None
) -> Settings:
    options = {"workers": workers, "orchestrator": "direct" if direct else None}
    return settings_from(settings, assignments, store, options)


def group_text(counts: dict[str, Any]) -> str:
    """The counts of a grouping in sentences."""
    if counts.get("nothing_new"):
        return "Nothing new to group."
    lines = [
        f"Run {counts['run']}: grouped {counted(counts['compositions'], 'composition')}, compared "
        f"{counted(counts['compared'], 'pair')} site by site; the store holds "
        f"{counted(counts['matches'], 'match', 'matches')}."
    ]
    for grade, groups in counts["groups"].items():
        lines.append(
            f"Grade {grade}: {counted(counts['families'][grade], 'family', 'families')}, "
            f"{counted(groups, 'group')}, {counted(counts['set_aside'][grade], 'record')} set aside."
        )
    if counts["findings"]:
        lines.append(
            "Findings: " + ", ".join(f"{code} {number:,}" for code, number in counts["findings"].items()) + "."
        )
    return "\n".join(lines)


def ingest_text(counts: dict[str, Any], dry_run: bool) -> str:
    """The counts of an ingest in sentences."""
    if counts.get("nothing_new"):
        if not counts["files"]:
            return "Nothing to read: there is no file in what was named (hidden ones are passed over)."
        return "Nothing new: every file is as it was read before."
    lines = [
        ("A dry run; nothing was changed. It would be:\n" if dry_run else f"Run {counts['run']}: ")
        + f"{counted(counts['found'], 'record')} found in {counted(counts['files_read'], 'file')} = "
        f"{counts['accepted']:,} accepted + {counts['rejected']:,} refused; "
        f"{counted(counts['files_unchanged'], 'file')} unchanged.",
        f"Of the accepted {counts['new']:,} new, {counts['amended']:,} amended, {counts['replaced']:,} replaced, "
        f"{counts['unchanged']:,} unchanged; {counts['missing']:,} missing from their files.",
    ]
    if counts["reasons"]:
        told = ", ".join(f"{reason} {number:,}" for reason, number in counts["reasons"].items())
        lines.append(f"Refused: {told}.")
    if counts["compositions_waiting"]:
        lines.append(
            f"{counted(counts['compositions_waiting'], 'composition')} changed; `group` brings their groups up to date."
        )
    for source in counts["no_unit"]:
        lines.append(
            f"The energies of {source} have no unit and stay in `properties`; give --energy-unit to compare them."
        )
    return "\n".join(lines)


def withdraw(
    what: Annotated[
        str,
        typer.Argument(
            metavar="SOURCE|RECORD", autocompletion=source_names, help="A source, a record id, or SOURCE:LABEL."
        ),
    ],
    reason: Annotated[str, typer.Option("--reason", help="Why, for those who come after.")],
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Take a source or a record out of every later result; `undo` takes that back. Nothing is deleted."""
    from .deciding import withdraw as act

    done = act(store, what, reason, wait)
    typer.echo(json.dumps(done) if as_json else f"Run {done['run']}: withdrew {counted(done['withdrawn'], 'record')}.")


def undo(
    what: Annotated[str, typer.Argument(metavar="RUN|RECORD", help="A run's number, a record, or a source.")],
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Take back the withdrawals and decisions of a run, a record or a source, and the pins of a run."""
    from .deciding import undo as act

    done = act(store, what, wait)
    typer.echo(json.dumps(done) if as_json else f"Run {done['run']}: {_undone_text(done)}.")


def _undone_text(done: dict[str, Any]) -> str:
    parts = []
    if done["restored"]:
        parts.append(f"restored {', '.join(done['restored'])}")
    if done["decisions"]:
        parts.append(
            f"{counted(done['decisions'], 'decision')} taken back; `keep --again RECORD` lets one be made again"
        )
    if done["decided_again"]:
        parts.append(f"{counted(done['decided_again'], 'earlier decision')} in force again")
    if done["pins"]:
        parts.append(f"{counted(done['pins'], 'pin')} as before")
    return "; ".join(parts)


def demo(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="New folder for the demo.")] = Path(
        "lattice-census-demo"
    ),
    direct: DirectOption = False,
    workers: WorkersOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> int:
    """Make a small invented collection and run everything on it."""
    from .demo import run_demo

    return run_demo(folder, direct, workers, quiet, as_json)
