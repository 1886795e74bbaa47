"""Commands that prove: check (the whole store) and witness (one pair). Both read the published store only."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Annotated

import typer

from .options import DEFAULT_STORE, JsonOption, StoreOption

if TYPE_CHECKING:
    from lattice_census.output.check import Outcome

MOST_WITNESSES = 20_000
"""Without --sample, so many witnesses of each kind are audited at most."""

FAILED = 4
"""Exit code of a check that fails."""


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("check")(check)


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
