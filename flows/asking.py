"""Commands that put questions to a store: ask, survey. Read-only; they start without anything heavy."""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from lattice_census.errors import StoreError, UsageError

from .completion import one_of, question_names
from .options import DEFAULT_STORE, JsonOption, StoreOption

if TYPE_CHECKING:
    import duckdb

    from lattice_census.output.ask import Limits
    from lattice_census.output.questions import Question


def register(app: typer.Typer) -> None:
    """Add the commands of this module."""
    app.command("ask", context_settings={"allow_extra_args": True, "ignore_unknown_options": True})(ask)
    app.command("survey")(survey)


def ask(
    context: typer.Context,
    name: Annotated[
        str | None,
        typer.Argument(
            metavar="[QUESTION [--PARAMETER VALUE]...]",
            help="A named question; without one, the list.",
            autocompletion=question_names,
        ),
    ] = None,
    sql: Annotated[str | None, typer.Option("--sql", metavar="SELECT", help="One SELECT of your own.")] = None,
    tables: Annotated[bool, typer.Option("--tables", help="Print the tables and columns with their meaning.")] = False,
    store: StoreOption = DEFAULT_STORE,
    rows: Annotated[
        int | None, typer.Option("--rows", help="Most rows [default: 10000; with --out every row].")
    ] = None,
    seconds: Annotated[float, typer.Option("--seconds", help="Longest time for the answer.")] = 60.0,
    memory: Annotated[str, typer.Option("--memory", help="Most memory for the answer, like 500MB.")] = "2GB",
    out: Annotated[
        Path | None, typer.Option("--out", metavar="FILE", help="Write the answer to a new .csv or .parquet file.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Answer a named question, or one SELECT, from the store; within limits, and without touching anything else."""
    if name is not None and name.startswith("-"):
        raise UsageError(f"There is no option {name}. Parameters stand behind the name of a question.")
    given = _parameters(context.args)
    asked = [what for what, there in (("a question", name), ("--sql", sql is not None), ("--tables", tables)) if there]
    if len(asked) > 1:
        raise UsageError(f"Give one of: {', '.join(asked)}.")
    if given and name is None:
        raise UsageError(f"--{next(iter(given))} is no option, and without a named question there are no parameters.")
    if not asked:
        _list(as_json)
        return
    from lattice_census.output.ask import Limits

    limits = Limits(seconds, memory, rows if rows is not None else (None if out else 10_000))
    if tables or name == "tables":
        _print_tables(store, limits, as_json)
    else:
        _answer(store, name, sql, given, limits, out, as_json)


def _parameters(words: list[str]) -> dict[str, str]:
    """`--name value` and `--name=value` as a mapping; UsageError for anything else."""
    given: dict[str, str] = {}
    rest = list(words)
    while rest:
        word = rest.pop(0)
        option, equals, value = word.partition("=")
        if not option.startswith("--") or len(option) < 3:
            raise UsageError(f"{word!r} stands alone: give parameters as --name value.")
        if not equals:
            if not rest:
                raise UsageError(f"{word} has no value.")
            value = rest.pop(0)
        name = option.removeprefix("--")
        if name in given:
            raise UsageError(f"{option} is given twice.")
        given[name] = value
    return given


def _list(as_json: bool) -> None:
    from lattice_census.output.questions import questions

    known = questions().values()
    if as_json:
        listed = [
            {"name": q.name, "question": q.sentence,
             "parameters": [{"name": p.name, "type": p.type, "required": p.required, "default": p.default,
                             "meaning": p.meaning} for p in q.parameters]}
            for q in known
        ]  # fmt: skip
        typer.echo(json.dumps(listed))
        return
    lines = []
    for q in known:
        lines.append(f"{q.name}: {q.sentence}")
        lines += [f"    {line}" for line in q.usage().splitlines()]
    lines.append("")
    lines.append("Ask one with `lattice-census ask NAME`, your own with `lattice-census ask --sql 'SELECT ...'`;")
    lines.append("`lattice-census ask tables` shows what can be asked about.")
    typer.echo("\n".join(lines))


def _open(store: Path, limits: Limits) -> duckdb.DuckDBPyConnection:
    from lattice_census.output.ask import lock_down
    from lattice_census.store.connect import open_for_reading

    connection = open_for_reading(store)
    try:
        lock_down(connection, limits)
    except BaseException:
        connection.close()
        raise
    return connection


def _print_tables(store: Path, limits: Limits, as_json: bool) -> None:
    from lattice_census.output.schema import schema_of, schema_text

    connection = _open(store, limits)
    try:
        found = schema_of(connection)
    finally:
        connection.close()
    typer.echo(json.dumps(found) if as_json else schema_text(found))


def _answer(
    store: Path,
    name: str | None,
    sql: str | None,
    given: dict[str, str],
    limits: Limits,
    out: Path | None,
    as_json: bool,
) -> None:
    from lattice_census.output.answer_file import check_target, write_answer
    from lattice_census.output.ask import ask as put
    from lattice_census.output.questions import bind, question_named
    from lattice_census.output.tables import number, table_text

    question = question_named(name) if name is not None else None
    text = question.sql if question is not None else str(sql)
    if out is not None:
        check_target(out)
    connection = _open(store, limits)
    try:
        _check_schema(connection, question)
        values = bind(question, given, connection) if question is not None else {}
        if out is not None:
            written, cut = write_answer(connection, text, values, out, limits, _end_process)
            facts = {"file": str(out), "rows": written, "cut": cut}
            typer.echo(json.dumps(facts) if as_json else f"{number(written)} rows written to {out}.")
            _say_cut(cut, limits)
            return
        answer = put(connection, text, values, limits, _end_process)
    finally:
        connection.close()
    if as_json:
        head: dict[str, Any] = {} if question is None else {"question": question.name, "parameters": values}
        typer.echo(json.dumps({**head, **answer.as_json()}))
    elif answer.rows:
        typer.echo(table_text(answer.columns, answer.rows))
    else:
        typer.echo("(no rows)")
    _say_cut(answer.cut, limits)


def _check_schema(connection: duckdb.DuckDBPyConnection, question: Question | None) -> None:
    """The named questions are written for the present schema; a store of an older one lacks some of it."""
    from lattice_census.store.schema import known_version, stored_version

    if question is not None and (stored_version(connection) or 0) < known_version():
        raise StoreError(
            "This store was last written by an older lattice-census and lacks what the named questions ask for. "
            "The next command that writes to it (lattice-census ingest PATH) brings it up to date."
        )


def _say_cut(cut: bool, limits: Limits) -> None:
    if cut:
        typer.echo(f"There are more rows than the {limits.rows:,} shown; --rows N raises the limit.", err=True)


def _end_process(message: str) -> None:
    """A query that hears no interruption: say so and end this process, which holds nothing half-written."""
    print(f"lattice-census: {message}", file=sys.stderr, flush=True)
    os._exit(4)


def survey(
    store: StoreOption = DEFAULT_STORE,
    by: Annotated[
        str | None,
        typer.Option(
            "--by",
            help="Divide also by source, split, theory, formula or elements.",
            autocompletion=one_of("source", "split", "theory", "formula", "elements"),
        ),
    ] = None,
    top: Annotated[int, typer.Option("--top", help="Most rows of a long table.")] = 20,
    as_json: JsonOption = False,
) -> None:
    """Lattices, centrings, cells, symmetry and refusals of all records and distinct crystals, counted."""
    from lattice_census.output.survey import BY, survey_text
    from lattice_census.output.survey import survey as count
    from lattice_census.store.connect import open_for_reading

    if by is not None and by not in BY:
        raise UsageError(f"--by {by}: choose from {', '.join(BY)}.")
    if top < 1:
        raise UsageError(f"--top {top}: give at least 1.")
    connection = open_for_reading(store)
    try:
        found = count(connection, by, top)
    finally:
        connection.close()
    typer.echo(json.dumps(found.as_json()) if as_json else survey_text(found))
