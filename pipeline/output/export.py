"""A clean collection on disk: the kept structures, what was set aside and why, and how it was made."""

from __future__ import annotations

import json
import os
import shutil
from collections import Counter
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Literal

import duckdb
import polars as pl

from .. import __version__
from ..errors import UsageError
from ..store.rows import one_number
from .ask import LOCKS
from .dealing import deal, families_of, parse_splits
from .export_files import write_files
from .selection import aside_rows, kept_rows, select_records

Form = Literal["cif", "csv", "parquet", "extxyz", "poscar"]
FORMS: tuple[Form, ...] = ("cif", "csv", "parquet", "extxyz", "poscar")

CAUTION = (
    "A group is a geometric statement, not a magnetic or electronic one; structures are as good as their source; "
    "a record that is set aside is a proposal, and nothing was deleted from the input."
)


@dataclass(frozen=True, slots=True)
class ExportCounts:
    """What an export wrote."""

    kept: int
    set_aside: int
    notes: tuple[str, ...]
    grade: str
    held: int
    """Kept records that wait for a curator."""

    left_out: int
    """Records that a condition left out, with those set aside in their favour: records = kept + set aside + this."""

    splits: dict[str, int]
    """Records dealt to each split."""


def export(
    connection: duckdb.DuckDBPyConnection,
    folder: Path,
    grade: str | None = None,
    form: Form = "cif",
    *,
    where: str | None = None,
    as_of: int | None = None,
    splits: str | None = None,
    seed: int = 0,
) -> ExportCounts:
    """Write the kept structures of a grade (default: near where computed, else key) into a new folder; whole or not at
    all.

    cif, poscar: one file a kept record in structures/, in the cell it came in; extxyz: one file of frames. csv,
    parquet: one table `structures`, with the input's own columns where the record came from a table whose file is still
    the one that was read, and ours prefixed `census_`. Beside it kept.csv, set_aside.csv and census.json.

    where: a condition on the kept records (selection.py). as_of: the number of a run; the collection as it stood then.
    splits: names and fractions; whole families are dealt out by `seed`, into a folder or file each. The connection is
    closed to everything outside the store where a condition is given. Raises UsageError (folder exists, no such grade
    or run, a condition that is none, a form that cannot hold a structure).
    """
    if folder.exists():
        raise UsageError(f"{folder} exists already: export writes into a new folder.")
    fractions = parse_splits(splits) if splits is not None else None
    if fractions is not None and as_of is not None:
        raise UsageError("--splits deals out families as they are now: it does not go with --as-of.")
    if where is not None:
        for setting in LOCKS:
            connection.execute(setting)
    selection = select_records(connection, grade, as_of)
    kept = kept_rows(connection, selection, where, as_of is not None)
    aside = aside_rows(connection)
    notes = list(selection.notes)
    dealt: dict[str, int] = {}
    if fractions is not None:
        families, at = families_of(connection, kept)
        names = deal(families, fractions, seed)
        kept = kept.with_columns(pl.Series("dealt_split", names, dtype=pl.String))
        dealt = {name: Counter(names)[name] for name in fractions}
        if at != "near":
            notes.append(f"Families of grade {at} were dealt out; with `group`, those of near would be.")
    total = one_number(connection, "SELECT count(*) FROM then_records")
    temporary = folder.with_name(f".{folder.name}.{os.getpid()}.new")
    shutil.rmtree(temporary, ignore_errors=True)
    temporary.mkdir(parents=True)
    try:
        if form == "csv" or form == "parquet":
            notes += _write_tables(connection, kept, temporary, form, as_of is None)
        else:
            kept = write_files(connection, kept, temporary, form)
        kept.write_csv(temporary / "kept.csv")
        aside.write_csv(temporary / "set_aside.csv")
        done = ExportCounts(
            len(kept),
            len(aside),
            tuple(notes),
            selection.grade,
            int(kept["held"].is_not_null().sum()),
            total - len(kept) - len(aside),
            dealt,
        )
        about = {
            "made_by": f"lattice-census {__version__}",
            "made_at": datetime.now(UTC).isoformat(timespec="seconds"),
            "grade": selection.grade,
            "basis": selection.basis,
            "form": form,
            "as_of_run": as_of,
            "where": where,
            "records": total,
            "kept": done.kept,
            "set_aside": done.set_aside,
            "left_out": done.left_out,
            "held": done.held,
            "splits": {"fractions": fractions, "seed": seed, "records": dealt} if fractions else None,
            "store": dict(connection.execute("SELECT name, value FROM store_facts ORDER BY name").fetchall()),
            "settings": _settings(connection),
            "notes": notes,
            "caution": CAUTION,
        }
        (temporary / "census.json").write_text(json.dumps(about, indent=2) + "\n", encoding="utf-8")
        temporary.replace(folder)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)
    return done


def _write_tables(
    connection: duckdb.DuckDBPyConnection,
    kept: pl.DataFrame,
    folder: Path,
    form: Literal["csv", "parquet"],
    from_input: bool,
) -> list[str]:
    """One table, or one a split."""
    from .export_table import write_table

    if "dealt_split" not in kept.columns:
        return write_table(connection, kept, folder / f"structures.{form}", form, from_input)
    notes: list[str] = []
    for (name,), rows in kept.group_by(["dealt_split"], maintain_order=True):
        notes += write_table(connection, rows, folder / f"structures.{name}.{form}", form, from_input)
    return list(dict.fromkeys(notes))


def _settings(connection: duckdb.DuckDBPyConnection) -> dict[str, Any]:
    return {
        name: json.loads(value)
        for name, value in connection.execute("SELECT name, value FROM stage_settings ORDER BY name").fetchall()
    }
