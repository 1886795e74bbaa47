"""Commands of the curator: keep and pin."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated, Any

import typer

from .completion import grades
from .options import (
    DEFAULT_STORE,
    DirectOption,
    JsonOption,
    QuietOption,
    SetOption,
    SettingsOption,
    StoreOption,
    WaitOption,
    settings_from,
)
from .words import counted

ReasonOption = Annotated[str, typer.Option("--reason", help="Why, for those who come after.")]


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("keep")(keep)
    pins = typer.Typer(
        name="pin",
        help="Say of single records that they are kept, or that two are, or are not, one crystal.",
        no_args_is_help=True,
        rich_markup_mode=None,
        context_settings={"help_option_names": ["--help", "-h"]},
    )
    pins.command("keep")(pin_keep)
    pins.command("apart")(pin_apart)
    pins.command("together")(pin_together)
    pins.command("list")(pin_list)
    pins.command("remove")(pin_remove)
    pins.command("export")(pin_export)
    pins.command("import")(pin_import)
    app.add_typer(pins)


def keep(
    store: StoreOption = DEFAULT_STORE,
    grade: Annotated[
        str | None,
        typer.Option(
            "--grade", autocompletion=grades, help="At which grade [default: near where it was computed, else key]."
        ),
    ] = None,
    note: Annotated[str | None, typer.Option("--note", help="A remark that stands beside every decision.")] = None,
    again: Annotated[
        list[str] | None,
        typer.Option("--again", metavar="RECORD", help="Decide again on a record whose decision was taken back."),
    ] = None,
    recompute: Annotated[
        bool, typer.Option("--recompute", help="Bring the groups up to date with changed keep rules first.")
    ] = False,
    dry_run: Annotated[bool, typer.Option("--dry-run", help="Show what would change and why; change nothing.")] = False,
    top: Annotated[int, typer.Option("--top", help="Most rows that a dry run shows; --json shows all.")] = 40,
    direct: DirectOption = False,
    wait: WaitOption = 0.0,
    settings: SettingsOption = None,
    assignments: SetOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Set the records aside that repeat a better one, each by a decision that can be taken back."""
    from lattice_census.output.tables import number, table_text

    from .driving import drive
    from .keeping import KeepJob
    from .keeping import keep as steps

    resolved = settings_from(settings, assignments, store, {"orchestrator": "direct" if direct else None})
    job = KeepJob(store, resolved, grade, note, tuple(again or ()), recompute, dry_run, wait)
    way = "direct" if dry_run else resolved.orchestrator  # what changes nothing is no flow to look back on
    counts = drive("keep", way, quiet, store, lambda step, _: steps(job, step), must_exist=True)
    if as_json:
        typer.echo(json.dumps(counts))
        return
    rows = counts.get("rows", [])
    if rows:
        columns = ("change", "record", "kept", "rule", "reason", "shift_angstrom", "strain")
        typer.echo(table_text([c.replace("_", " ") for c in columns], [[r[c] for c in columns] for r in rows[:top]]))
        if len(rows) > top:
            typer.echo(f"... and {number(len(rows) - top)} rows more (--top N, or --json).")
    typer.echo(keep_text(counts, dry_run))


def keep_text(counts: dict[str, Any], dry_run: bool = False) -> str:
    """The counts of a run of keep in a sentence or two."""
    if counts.get("nothing_new"):
        aside = counted(counts["in_force"], "record is", "records are")
        text = f"Nothing new to decide at grade {counts['grade']}; {aside} set aside."
    else:
        head = "A dry run; nothing was changed. It would be: " if dry_run else f"Run {counts['run']}: "
        records = counted(counts["set_aside"], "record")
        text = (
            f"{head}{records} set aside at grade {counts['grade']}, "
            f"{counts['superseded']:,} for another kept record than before, {counts['kept_again']:,} kept again; "
            f"{counts['in_force']:,} in all."
        )
    if counts["held"]:
        text += f" {counts['held']:,} {'is' if counts['held'] == 1 else 'are'} held: `ask --sql 'FROM holds'` says why."
    return text


def pin_keep(
    record: Annotated[str, typer.Argument(metavar="RECORD", help="A record id or SOURCE:LABEL.")],
    reason: ReasonOption,
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Make a record the kept one of its group."""
    _pin(store, "keep", (record,), reason, wait, as_json)


def pin_apart(
    record: Annotated[str, typer.Argument(metavar="RECORD", help="A record id or SOURCE:LABEL.")],
    other: Annotated[str, typer.Argument(metavar="RECORD", help="The other one.")],
    reason: ReasonOption,
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Hold two records to be two crystals, whatever is measured."""
    _pin(store, "apart", (record, other), reason, wait, as_json)


def pin_together(
    record: Annotated[str, typer.Argument(metavar="RECORD", help="A record id or SOURCE:LABEL.")],
    other: Annotated[str, typer.Argument(metavar="RECORD", help="The other one.")],
    reason: ReasonOption,
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Hold two records that match just outside a grade to be one crystal."""
    _pin(store, "together", (record, other), reason, wait, as_json)


def _pin(store: Path, kind: str, records: tuple[str, ...], reason: str, wait: float, as_json: bool) -> None:
    from .deciding import pin

    done = pin(store, kind, records, reason, wait)
    typer.echo(json.dumps(done) if as_json else f"Run {done['run']}: pin {done['pin']} set ({kind}).")
    if kind == "together":
        _warn_refused(store, done["pin"])


def _warn_refused(store: Path, number: int) -> None:
    from lattice_census.store.connect import open_for_reading
    from lattice_census.store.rows import one_row

    connection = open_for_reading(store)
    try:
        refused = one_row(connection, "SELECT 1 FROM refused_pins WHERE pin_id = ?", [number])
    finally:
        connection.close()
    if refused:
        typer.echo(
            f"The two do not match, not even just outside near: pin {number} takes no part (finding refused_pin).",
            err=True,
        )


def pin_list(store: StoreOption = DEFAULT_STORE, as_json: JsonOption = False) -> None:
    """Show the pins that hold."""
    from lattice_census.output.tables import table_text

    pins = _listed(store)
    if as_json:
        typer.echo(json.dumps(pins))
    elif not pins:
        typer.echo("(no pins)")
    else:
        rows = [
            (p["pin"], p["kind"], *([f"{r['source']}:{r['label']}" for r in p["records"]] + [None])[:2], p["reason"],
             p["by"], p["day"], "takes no part" if p["refused"] else None)
            for p in pins
        ]  # fmt: skip
        typer.echo(table_text(("pin", "kind", "record", "other record", "reason", "by", "day", "note"), rows))


def _listed(store: Path) -> list[dict[str, Any]]:
    from lattice_census.decisions.pins import listed_pins
    from lattice_census.store.connect import open_for_reading

    connection = open_for_reading(store)
    try:
        return listed_pins(connection)
    finally:
        connection.close()


def pin_remove(
    number: Annotated[int, typer.Argument(metavar="N", help="The number of the pin.")],
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Remove a pin."""
    from .deciding import unpin

    done = unpin(store, number, wait)
    typer.echo(json.dumps(done) if as_json else f"Run {done['run']}: pin {number} removed ({done['kind']}).")


def pin_export(
    file: Annotated[Path, typer.Argument(metavar="FILE.toml", help="A new file.")],
    store: StoreOption = DEFAULT_STORE,
    as_json: JsonOption = False,
) -> None:
    """Write the pins that hold into a file."""
    from lattice_census.decisions.pin_file import pins_text
    from lattice_census.errors import UsageError

    if file.exists():
        raise UsageError(f"{file} exists already; it is not written over.")
    pins = _listed(store)
    try:
        file.write_text(pins_text(pins), encoding="utf-8")
    except OSError as error:
        raise UsageError(f"{file} cannot be written: {error.strerror}.") from error
    facts = {"file": str(file), "pins": len(pins)}
    typer.echo(json.dumps(facts) if as_json else f"{counted(len(pins), 'pin')} written to {file}.")


def pin_import(
    file: Annotated[Path, typer.Argument(metavar="FILE.toml", help="A file that `pin export` wrote.")],
    store: StoreOption = DEFAULT_STORE,
    wait: WaitOption = 0.0,
    as_json: JsonOption = False,
) -> None:
    """Set the pins of a file; those that hold already are passed over."""
    from lattice_census.decisions.pin_file import read_pins

    from .deciding import import_pins

    done = import_pins(store, read_pins(file), wait)
    told = f"Run {done['run']}: pins set: {done['added']}, held already: {done['known']}."
    typer.echo(json.dumps(done) if as_json else told)
