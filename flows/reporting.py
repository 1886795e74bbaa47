"""The command that writes a page about a store: report. It reads the published store only."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer

from .options import DEFAULT_STORE, JsonOption, StoreOption


def register(app: typer.Typer) -> None:
    """Add the command of this module."""
    app.command("report")(report)


def report(
    store: StoreOption = DEFAULT_STORE,
    out: Annotated[
        Path | None,
        typer.Option(
            "--out", metavar="FILE.html", help="The page [default: report.html beside the store]; only a report is "
            "replaced.",
        ),
    ] = None,
    as_json: JsonOption = False,
) -> None:  # fmt: skip
    """Write one page about the store, with pictures, that needs no network: survey, groups, proofs, cautions."""
    from lattice_census.output.report import check_target, write_report
    from lattice_census.store.connect import open_for_reading

    path = out if out is not None else store.parent / "report.html"
    check_target(path)
    connection = open_for_reading(store)
    try:
        size = write_report(connection, path)
    finally:
        connection.close()
    typer.echo(json.dumps({"file": str(path), "bytes": size}) if as_json else f"Wrote {path} ({size:,} bytes).")
