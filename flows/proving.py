"""Commands that prove: check (the whole store) and witness (one pair). Both read the published store only."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from .options import DEFAULT_STORE, JsonOption, QuietOption, StoreOption

if TYPE_CHECKING:
    from lattice_census.output.check import Outcome

MOST_WITNESSES = 20_000
"""Without --sample, so many witnesses of each kind are audited at most."""

FAILED = 4
"""Exit code of a check that fails."""


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("witness")(witness)
    app.command("check")(check)


def witness(
    first: Annotated[str, typer.Argument(metavar="RECORD", help="A record: its id, or SOURCE:LABEL.")],
    second: Annotated[str, typer.Argument(metavar="RECORD", help="Another record.")],
    store: StoreOption = DEFAULT_STORE,
    rows: Annotated[int, typer.Option("--rows", min=0, help="Most paired sites that are printed.")] = 20,
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="DIR", help="New folder for a.cif, b.cif and witness.json, to check by hand."),
    ] = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
) -> None:
    """Prove that two records are the same crystal, or say with numbers what keeps them apart."""
    from lattice_census.output.witness import check_folder, examine, witness_text, write_witness
    from lattice_census.store.connect import open_for_reading
    from lattice_census.store.find import find_record

    if out is not None:
        check_folder(out)
    say = (lambda: None) if quiet else _say_compiling
    connection = open_for_reading(store)
    try:
        found = examine(connection, find_record(connection, first), find_record(connection, second), say)
    finally:
        connection.close()
    if out is not None:
        write_witness(found, out)
        if not quiet:
            typer.echo(f"Wrote a.cif, b.cif and witness.json to {out}.", err=True)
    typer.echo(json.dumps(found.as_json()) if as_json else witness_text(found, rows))


def _say_compiling() -> None:
    """On stderr, where the kernels of the comparison are not compiled yet."""
    from lattice_census.kernels.cache import PACKAGE, folder

    for name in ("match", "distances"):
        kept = folder(PACKAGE / "kernels" / f"{name}.py")
        if next(kept.rglob("*.nbi"), None) is None:
            typer.echo("Compiling the kernels of the comparison; later runs take them from the cache.", err=True)
            return


def check(
    store: StoreOption = DEFAULT_STORE,
    sample: Annotated[
        int | None,
        typer.Option(
            "--sample", metavar="N", min=0, help=f"Audit so many witnesses [default: all up to {MOST_WITNESSES:,}]."
        ),
    ] = None,
    as_json: JsonOption = False,
) -> int:
    """Examine every invariant of the store, and rebuild its matches from the structures as they came."""
    from lattice_census.output.check import check_store
    from lattice_census.store.connect import open_for_reading

    most = MOST_WITNESSES if sample is None else sample
    connection = open_for_reading(store)
    try:
        outcomes = check_store(connection, most, None if as_json else _tell)
    finally:
        connection.close()
    failed = [o for o in outcomes if o.failures]
    if as_json:
        typer.echo(json.dumps({"holds": not failed, "checks": [o.as_json() for o in outcomes]}))
    elif not failed:
        typer.echo(f"All {len(outcomes)} checks hold.")
    if not failed:
        return 0
    typer.echo(
        f"lattice-census: {len(failed)} of {len(outcomes)} checks fail: {', '.join(o.name for o in failed)}. Either "
        f"{store} was changed by something else or damaged, or this is a fault of lattice-census; please report it. "
        "Nothing was changed. The input files are untouched, so that the store can be made anew from them.",
        err=True,
    )
    return FAILED


def _tell(outcome: Outcome) -> None:
    """A line a check; where it fails, the invariant and the first rows that break it."""
    from lattice_census.output.tables import heading, table_text

    extent = ""
    if outcome.examined is not None:
        whole = outcome.examined == outcome.of
        extent = f" ({'all ' if whole else ''}{outcome.examined:,}{'' if whole else f' of {outcome.of:,}'} audited)"
    if not outcome.failures:
        typer.echo(f"{outcome.name}: ok{extent}")
        return
    typer.echo(f"{outcome.name}: {outcome.failures:,} FAIL{extent}")
    typer.echo(f"  {outcome.invariant}")
    for line in table_text([heading(c) for c in outcome.columns], outcome.rows).splitlines():
        typer.echo(f"  {line}")
    if outcome.failures > len(outcome.rows):
        typer.echo(f"  ... and {outcome.failures - len(outcome.rows):,} more")
