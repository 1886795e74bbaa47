"""Commands that only read a store: status, export."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated, Any

import typer

from .completion import grades, one_of
from .options import DEFAULT_STORE, JsonOption, QuietOption, StoreOption
from .words import counted


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("status")(status)
    app.command("export")(export)


def status(store: StoreOption = DEFAULT_STORE, as_json: JsonOption = False) -> None:
    """What the store holds: records, refusals, groups, sources, runs."""
    from lattice_census.output.status import status as read
    from lattice_census.store.connect import open_for_reading

    connection = open_for_reading(store)
    try:
        facts = read(connection)
    finally:
        connection.close()
    typer.echo(json.dumps(facts) if as_json else _status_text(facts))


def _status_text(facts: dict[str, Any]) -> str:
    lines = [
        f"{counted(facts['records'], 'record')} accepted, {facts['rejected']:,} refused; "
        f"{counted(facts['formulas'], 'formula')}",
        f"{facts['current']:,} take part in results ({facts['missing']:,} missing from their files, "
        f"{facts['withdrawn']:,} withdrawn)",
    ]
    for group in facts["groups"]:
        lines.append(
            f"grade {group['grade']}: {counted(group['groups'], 'group')}, "
            f"{counted(group['set_aside'], 'record')} set aside, the largest group holds {group['largest']:,}"
        )
    for grade, count in facts["decisions"].items():
        lines.append(f"decided at grade {grade}: {counted(count, 'record')} set aside")
    if facts["held"]:
        lines.append("held: " + ", ".join(f"{reason} {n:,}" for reason, n in facts["held"].items()))
    if facts["pins"]:
        lines.append(f"pins: {facts['pins']:,}")
    if facts["findings"]:
        lines.append("findings: " + ", ".join(f"{code} {n:,}" for code, n in facts["findings"].items()))
    if facts["refusals"]:
        lines.append("refused: " + ", ".join(f"{reason} {n:,}" for reason, n in facts["refusals"].items()))
    for source in facts["sources"]:
        lines.append(
            f"source {source['source']} ({source['kind']} {source['root']}): {counted(source['files'], 'file')}, "
            f"{counted(source['records'], 'record')}, {source['rejected']:,} refused"
        )
    for run in facts["runs"]:
        lines.append(f"run {run['run']}: {run['command']}, {run['status']}, began {run['started_at'][:19]} UTC")
    return "\n".join(lines)


def export(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="A new folder.")],
    store: StoreOption = DEFAULT_STORE,
    grade: Annotated[
        str | None,
        typer.Option(
            "--grade",
            autocompletion=grades,
            help="Which records count as the same [default: near where computed, else key].",
        ),
    ] = None,
    form: Annotated[
        str,
        typer.Option(
            "--form",
            autocompletion=one_of("cif", "poscar", "extxyz", "csv", "parquet"),
            help="cif, poscar (a file a structure), extxyz, csv or parquet (one file).",
        ),
    ] = "cif",
    where: Annotated[
        str | None, typer.Option("--where", metavar="SQL", help="A condition on the columns of the kept records.")
    ] = None,
    as_of: Annotated[
        int | None, typer.Option("--as-of", metavar="RUN", help="The collection as it stood after this run.")
    ] = None,
    splits: Annotated[
        str | None,
        typer.Option("--splits", metavar="NAME=SHARE,...", help="Deal out whole families: train=0.8,val=0.1,test=0.1."),
    ] = None,
    seed: Annotated[int, typer.Option("--seed", help="Another seed deals otherwise.")] = 0,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Write the kept structures into a new folder, with the list of what was set aside and why."""
    from lattice_census.errors import UsageError
    from lattice_census.output.export import FORMS
    from lattice_census.output.export import export as write
    from lattice_census.store.connect import open_for_reading

    chosen = next((f for f in FORMS if f == form), None)
    if chosen is None:
        raise UsageError(f"--form {form}: choose from {', '.join(FORMS)}.")
    connection = open_for_reading(store)
    try:
        done = write(connection, folder, grade, chosen, where=where, as_of=as_of, splits=splits, seed=seed)
    finally:
        connection.close()
    for note in () if quiet else done.notes:
        typer.echo(note, err=True)
    if as_json:
        facts = {"folder": str(folder), "grade": done.grade, "kept": done.kept, "set_aside": done.set_aside,
                 "held": done.held, "left_out": done.left_out, "splits": done.splits}  # fmt: skip
        typer.echo(json.dumps(facts))
        return
    told = f"Exported to {folder}: {done.kept:,} kept, {done.set_aside:,} set aside at grade {done.grade}"
    if done.held:
        told += f"; {done.held:,} of the kept are held (kept.csv says why)"
    if done.left_out:
        told += f"; {done.left_out:,} left out by the condition"
    if done.splits:
        told += "; " + ", ".join(f"{name} {count:,}" for name, count in done.splits.items())
    typer.echo(told + ".")
