"""Commands that only read a store: status, export."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated, Any

import typer

from .options import DEFAULT_STORE, JsonOption, StoreOption


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
        f"{facts['records']:,} records accepted, {facts['rejected']:,} refused; {facts['formulas']:,} formulas",
        f"{facts['current']:,} take part in results ({facts['missing']:,} missing from their files, "
        f"{facts['withdrawn']:,} withdrawn)",
    ]
    for group in facts["groups"]:
        lines.append(
            f"grade {group['grade']}: {group['groups']:,} groups, {group['set_aside']:,} records set aside, "
            f"the largest group holds {group['largest']:,}"
        )
    if facts["refusals"]:
        lines.append("refused: " + ", ".join(f"{reason} {n:,}" for reason, n in facts["refusals"].items()))
    for source in facts["sources"]:
        lines.append(
            f"source {source['source']} ({source['kind']} {source['root']}): {source['files']:,} files, "
            f"{source['records']:,} records, {source['rejected']:,} refused"
        )
    for run in facts["runs"]:
        lines.append(f"run {run['run']}: {run['command']}, {run['status']}, began {run['started_at'][:19]} UTC")
    return "\n".join(lines)


def export(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="A new folder.")],
    store: StoreOption = DEFAULT_STORE,
    grade: Annotated[str, typer.Option("--grade", help="copy or key: which records count as the same.")] = "key",
    form: Annotated[str, typer.Option("--form", help="cif (a file a structure), csv or parquet (one table).")] = "cif",
    as_json: JsonOption = False,
) -> None:
    """Write one structure a group into a new folder, with the list of what was set aside and why."""
    from lattice_census.errors import UsageError
    from lattice_census.output.export import export as write
    from lattice_census.store.connect import open_for_reading

    if form not in ("cif", "csv", "parquet"):
        raise UsageError(f"--form {form}: choose from cif, csv, parquet.")
    connection = open_for_reading(store)
    try:
        done = write(connection, folder, grade, form)  # type: ignore[arg-type]
    finally:
        connection.close()
    if as_json:
        typer.echo(json.dumps({"folder": str(folder), "kept": done.kept, "set_aside": done.set_aside}))
        return
    for note in done.notes:
        typer.echo(note, err=True)
    typer.echo(f"Exported to {folder}: {done.kept:,} kept, {done.set_aside:,} set aside.")
