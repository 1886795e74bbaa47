"""Commands that compare: known (new structures with the store) and overlap (sources or splits with each other)."""

from __future__ import annotations

import csv
import json
import os
from collections import Counter
from pathlib import Path
from typing import Annotated, Any

import typer

from .completion import grades, one_of, source_names
from .options import DEFAULT_STORE, JsonOption, QuietOption, StoreOption, WorkersOption, fail_on


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("known")(known)
    app.command("overlap")(overlap)


def known(
    files: Annotated[list[Path], typer.Argument(metavar="FILE", help="Files or folders of structures.")],
    store: StoreOption = DEFAULT_STORE,
    grade: Annotated[
        str, typer.Option("--grade", autocompletion=grades, help="copy, key, same or near: what counts as known.")
    ] = "near",
    id_column: Annotated[str | None, typer.Option("--id-column", help="Column of the label.")] = None,
    structure_column: Annotated[
        str | None, typer.Option("--structure-column", help="Column of the structure text.")
    ] = None,
    out: Annotated[Path | None, typer.Option("--out", metavar="FILE.csv", help="Write the rows to a new file.")] = None,
    top: Annotated[int, typer.Option("--top", help="Most rows printed; --out and --json have all.")] = 40,
    workers: WorkersOption = None,
    as_json: JsonOption = False,
    quiet: QuietOption = False,
    fails: Annotated[
        list[str] | None, typer.Option("--fail-on", metavar="WHAT", help="Exit with 1 when there are: known, rejects.")
    ] = None,
) -> int:
    """Say of structures whether the store has them already, without adding them."""
    failing = fail_on(fails, ("known", "rejects"))
    from lattice_census.errors import UsageError
    from lattice_census.ingest.pool import WorkerPool
    from lattice_census.output.known import COLUMNS, GRADES
    from lattice_census.output.known import known as find
    from lattice_census.settings import Settings, SourceSettings
    from lattice_census.store.connect import open_for_reading
    from lattice_census.store.stages import stored_settings

    from .progress import progress_for

    if grade not in GRADES:
        raise UsageError(f"--grade {grade}: choose from {', '.join(GRADES)}.")
    if out is not None and (out.exists() or out.suffix.lower() != ".csv" or not out.absolute().parent.is_dir()):
        raise UsageError(f"--out {out}: give a new file that ends in .csv, in a folder that is there.")
    of_source = SourceSettings(id_column=id_column, structure_column=structure_column)
    connection = open_for_reading(store)
    try:
        settings = Settings.model_validate({**stored_settings(connection), "workers": workers or 0})
        with progress_for(quiet) as progress, WorkerPool(settings.worker_count) as pool:
            rows = find(connection, files, settings, grade, of_source, pool, progress)
    finally:
        connection.close()
    counts = Counter(row["verdict"] for row in rows)
    if out is not None:
        _write_csv(out, COLUMNS, rows)
    if as_json:
        typer.echo(json.dumps({"grade": grade, "counts": counts, "rows": rows}))
    else:
        if out is None and rows:
            _print_table([c for c in COLUMNS if c != "record_id"], rows, top)
        typer.echo(
            f"{len(rows):,} structures at grade {grade}: {counts['known']:,} known, {counts['new']:,} new, "
            f"{counts['refused']:,} refused" + (f"; the rows stand in {out}." if out is not None else ".")
        )
    return 1 if ("known" in failing and counts["known"]) or ("rejects" in failing and counts["refused"]) else 0


def overlap(
    first: Annotated[
        str | None, typer.Argument(metavar="[A", autocompletion=source_names, help="A source or split.")
    ] = None,
    second: Annotated[
        str | None, typer.Argument(metavar="B]", autocompletion=source_names, help="Another one.")
    ] = None,
    store: StoreOption = DEFAULT_STORE,
    by: Annotated[
        str, typer.Option("--by", autocompletion=one_of("source", "split"), help="source or split: what A and B are.")
    ] = "source",
    grade: Annotated[str, typer.Option("--grade", autocompletion=grades, help="copy, key, same or near.")] = "near",
    top: Annotated[int, typer.Option("--top", help="Most rows printed; --json has all.")] = 40,
    as_json: JsonOption = False,
    fails: Annotated[
        list[str] | None, typer.Option("--fail-on", metavar="WHAT", help="Exit with 1 when there is: overlap.")
    ] = None,
) -> int:
    """Which records of A are the same crystal as one of B; without A and B, the numbers for all."""
    failing = fail_on(fails, ("overlap",))
    from lattice_census.errors import UsageError
    from lattice_census.output import overlap as find
    from lattice_census.store.connect import open_for_reading

    if by not in ("source", "split"):
        raise UsageError(f"--by {by}: choose from source, split.")
    if (first is None) != (second is None):
        raise UsageError("Give two names, or none for all of them.")
    if first is not None and first == second:
        raise UsageError("Give two different names.")
    connection = open_for_reading(store)
    try:
        find.check_grade(connection, grade)
        if first is None or second is None:
            matrix = find.overlap_matrix(connection, by, grade)
            found = bool(matrix)
            if as_json:
                typer.echo(json.dumps({"by": by, "grade": grade, "rows": matrix}))
            elif matrix:
                _print_table(list(matrix[0]), matrix, top)
            else:
                typer.echo(f"No two {by}s have a record in common at grade {grade}.")
        else:
            told = find.overlap(connection, by, first, second, grade)
            found = bool(told.rows)
            if as_json:
                typer.echo(json.dumps({"by": by, "grade": grade, "counts": told.counts, "rows": told.rows}))
            else:
                _print_overlap(told, first, second, top)
    finally:
        connection.close()
    return 1 if "overlap" in failing and found else 0


def _print_overlap(told: Any, first: str, second: str, top: int) -> None:
    from lattice_census.output.tables import safe, table_text

    one, two = safe(first), safe(second)
    heads = ("grade", f"records of {one}", f"records of {two}")
    typer.echo(table_text(heads, [(c["grade"], c["of_first"], c["of_second"]) for c in told.counts]))
    if told.rows:
        typer.echo("")
        columns = [name for name in told.rows[0] if not name.endswith("record_id")]
        _print_table(columns, list(told.rows), top)
    by_family = sum(row["criterion"] == "family" for row in told.rows)
    if by_family:
        typer.echo(
            f"{by_family:,} of them by family: their records have more matches than the store lists, so that a direct "
            "one may be missing; `witness` compares two."
        )


def _print_table(columns: list[str], rows: list[dict[str, Any]], top: int) -> None:
    from lattice_census.output.tables import heading, table_text

    typer.echo(table_text([heading(c) for c in columns], [[row[c] for c in columns] for row in rows[:top]]))
    if len(rows) > top:
        typer.echo(f"... and {len(rows) - top:,} rows more.")


def _write_csv(path: Path, columns: tuple[str, ...], rows: list[dict[str, Any]]) -> None:
    """The rows as a CSV file, whole or not at all."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}.new")
    try:
        with temporary.open("x", newline="", encoding="utf-8") as f:
            writer = csv.DictWriter(f, list(columns))
            writer.writeheader()
            writer.writerows(rows)
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)
