"""One SELECT put to the published store, within limits on what it may touch, how long, how much memory, how many rows.

The store is opened read-only; then external access is shut off and the configuration locked, so that no statement can
open it again. That alone would still let through LOAD and temporary tables, so a text is parsed first and goes through
only as one statement of the kind SELECT (which takes in WITH, VALUES, FROM first, DESCRIBE, SHOW and SUMMARIZE).

DuckDB's own limit of memory does not count what a single function allocates, such as a list of a billion numbers, nor
does every function look for an interruption. So a thread watches the clock and the resident memory of the process,
interrupts the query, and, where that is not heard, leaves it to the caller to end the process.
"""

from __future__ import annotations

import re
import sys
import threading
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import Any

import duckdb

from ..errors import CensusError, UsageError, WorkError
from .tables import json_row, safe_lines

MEMORY_UNITS = {"kb": 10**3, "mb": 10**6, "gb": 10**9, "tb": 10**12, "kib": 2**10, "mib": 2**20, "gib": 2**30}

LOCKS = (
    "SET autoinstall_known_extensions = false",
    "SET autoload_known_extensions = false",
    "SET allow_community_extensions = false",
    "SET python_enable_replacements = false",
    "SET temp_directory = ''",
    "SET max_temp_directory_size = '0B'",
    "SET enable_external_access = false",
    "SET lock_configuration = true",
)
"""In this order, after the limit of memory: nothing is spilled to disk, no file is opened, nothing can be set back."""

MEMORY_SLACK = 256 * 2**20
"""Bytes beyond the limit of memory before the query is interrupted: for results on their way."""

GRACE_SECONDS = 3.0
"""How long an interruption may go unheard before the caller is asked to end the process."""


@dataclass(frozen=True, slots=True)
class Limits:
    """What one query may take."""

    seconds: float = 60.0
    memory: str = "2GB"
    rows: int | None = 10_000
    """None: every row."""

    def __post_init__(self) -> None:
        if not 0 < self.seconds <= 86_400:
            raise UsageError(f"--seconds {self.seconds:g}: give a number above 0, at most 86400.")
        if self.rows is not None and self.rows < 1:
            raise UsageError(f"--rows {self.rows}: give at least 1.")
        if self.memory_bytes < 16 * 2**20:
            raise UsageError(f"--memory {self.memory}: give at least 16MB.")

    @property
    def memory_bytes(self) -> int:
        """The limit of memory in bytes; UsageError where the text is none."""
        match = re.fullmatch(r"(\d{1,6}(?:\.\d{1,6})?) ?([KMGT]B|[KMG]iB)", self.memory, re.IGNORECASE)
        if match is None:
            raise UsageError(f"--memory {self.memory}: give it like 500MB or 2GB.")
        return int(float(match[1]) * MEMORY_UNITS[match[2].lower()])


@dataclass(frozen=True, slots=True)
class Answer:
    """Rows of one query."""

    columns: tuple[str, ...]
    """Names, made distinct where the query repeats one."""

    types: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]
    cut: bool
    """True where there are more rows than the limit let through."""

    def as_json(self) -> dict[str, Any]:
        """Columns with types, rows as objects, and whether rows were cut; ready for json.dumps."""
        columns = [{"name": n, "type": t} for n, t in zip(self.columns, self.types, strict=True)]
        return {"columns": columns, "rows": [json_row(self.columns, r) for r in self.rows], "cut": self.cut}


def lock_down(connection: duckdb.DuckDBPyConnection, limits: Limits) -> None:
    """Limit memory, shut off everything outside the store, and lock that for the life of the connection."""
    connection.execute(f"SET memory_limit = '{limits.memory_bytes // 1000}KB'")
    for setting in LOCKS:
        connection.execute(setting)


def check_select(connection: duckdb.DuckDBPyConnection, sql: str) -> None:
    """UsageError unless the text is exactly one SELECT without open parameters. Nothing is run."""
    try:
        statements = connection.extract_statements(sql)
    except duckdb.Error as error:
        raise _refused(error) from error
    if len(statements) != 1:
        raise UsageError(f"Give exactly one SELECT; this text holds {len(statements)} statements.")
    kind = statements[0].type
    if kind == duckdb.StatementType.MULTI:
        raise UsageError(
            "A PIVOT that has to look up its own columns is several statements. Name the values: "
            "FROM (PIVOT ... ON column IN (...) USING ...)."
        )
    if kind != duckdb.StatementType.SELECT:
        raise UsageError(f"Only a SELECT is answered here, and this is a statement of the kind {kind.name}.")


def ask(
    connection: duckdb.DuckDBPyConnection,
    sql: str,
    values: Mapping[str, Any],
    limits: Limits,
    give_up: Callable[[str], None] | None = None,
) -> Answer:
    """Run one SELECT with bound values; on a connection that `lock_down` was put on.

    Raises UsageError for what is no single SELECT, is refused by the locks, or cannot be answered as written, and
    WorkError where a limit was met. give_up: called from another thread with the message where the query does not let
    itself be interrupted; it is to end the process.
    """
    with Watch(connection, sql, limits, give_up):
        cursor = connection.execute(sql, dict(values)) if values else connection.execute(sql)
        description = cursor.description or []
        names, types = distinct([d[0] for d in description]), tuple(str(d[1]) for d in description)
        rows = cursor.fetchall() if limits.rows is None else cursor.fetchmany(limits.rows + 1)
    cut = limits.rows is not None and len(rows) > limits.rows
    rows = rows[: limits.rows] if cut else rows
    return Answer(names, types, tuple(tuple(r) for r in rows), cut)


class Watch:
    """Context of a query: checks that it is one SELECT, watches its limits, turns DuckDB's errors into ours."""

    def __init__(
        self,
        connection: duckdb.DuckDBPyConnection,
        sql: str,
        limits: Limits,
        give_up: Callable[[str], None] | None = None,
    ) -> None:
        check_select(connection, sql)
        self._connection, self._limits, self._give_up = connection, limits, give_up
        self._ended = threading.Event()
        self._met: str | None = None
        self._thread = threading.Thread(target=self._watch, name="limits of a query", daemon=True)

    def __enter__(self) -> Watch:
        self._base = resident_bytes()
        self._deadline = time.monotonic() + self._limits.seconds
        self._thread.start()
        return self

    def check(self) -> None:
        """Raise where a limit was met: for use between the parts of a long result."""
        if self._met is not None:
            raise WorkError(self._met)

    def _watch(self) -> None:
        most = self._base + self._limits.memory_bytes + MEMORY_SLACK
        while not self._ended.wait(0.05):
            if time.monotonic() >= self._deadline:
                self._met = _no_time(self._limits)
            elif resident_bytes() > most:
                self._met = _no_memory(self._limits)
            if self._met is not None:
                break
        if self._met is None:
            return
        self._connection.interrupt()
        if not self._ended.wait(GRACE_SECONDS) and self._give_up is not None:
            self._give_up(self._met)

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self._ended.set()
        self._thread.join()
        if self._met is not None and (error is None or isinstance(error, duckdb.Error | CensusError)):
            raise WorkError(self._met) from error
        if isinstance(error, duckdb.OutOfMemoryException):
            raise WorkError(_no_memory(self._limits)) from error
        if isinstance(error, duckdb.Error):
            raise _refused(error) from error


def _no_time(limits: Limits) -> str:
    return f"The query was stopped after {limits.seconds:g} s. Ask for less, or give more with --seconds."


def _no_memory(limits: Limits) -> str:
    return f"The query needs more memory than {limits.memory}. Ask for less, or give more with --memory."


def _refused(error: duckdb.Error) -> UsageError:
    text = safe_lines(str(error).strip())
    if isinstance(error, duckdb.PermissionException):
        return UsageError(f"A question sees the store and nothing else: {text.splitlines()[0]}")
    return UsageError(f"The query cannot be answered. {text}")


def resident_bytes() -> int:
    """Resident memory of this process; where the system does not tell the present one, the largest so far."""
    try:
        with open("/proc/self/statm", "rb") as f:  # noqa: PTH123 - the shortest way, many times a second
            return int(f.read().split()[1]) * _page_size()
    except OSError:
        import resource

        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
        return peak if sys.platform == "darwin" else peak * 1024


def _page_size() -> int:
    import resource

    return resource.getpagesize()


def distinct(names: list[str]) -> tuple[str, ...]:
    """The names with `_2`, `_3` ... behind those that came before."""
    used: set[str] = set()
    out = []
    for name in names:
        new, n = name, 1
        while new in used:
            n += 1
            new = f"{name}_{n}"
        used.add(new)
        out.append(new)
    return tuple(out)
