"""A clean collection on disk: one structure a group, what was set aside and why, and how it was made."""

from __future__ import annotations

import json
import os
import re
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
from ..store.rows import one_row
from .cif import cif_text
from .structures import given_structures

Form = Literal["cif", "csv", "parquet"]

CAUTION = (
    "A group is a geometric statement, not a magnetic or electronic one; structures are as good as their source; "
    "a record that is set aside is a proposal, and nothing was deleted from the input."
)

KEPT = (
    "SELECT m.record_id, m.source, m.label, r.file, r.reader, r.position, r.formula, r.sites_given, r.sites_primitive, "
    "x.crystal_key, x.volume_angstrom3_per_site, r.energy_ev_per_site, r.theory, r.split, "
    "(SELECT count(*) FROM members o WHERE o.grade = m.grade AND o.group_id = m.group_id) AS group_size "
    "FROM members m JOIN records r USING (record_id) JOIN canonical_forms x USING (record_id) "
    "WHERE m.grade = ? AND m.kept ORDER BY m.source, r.file, r.position, m.record_id"
)

# Why a record is the same as its kept one, from what is known without a witness: equal content, equal given cell
# (edges and site count; to 1e-3 angstrom), another number of primitive cells, or else another description.
SET_ASIDE = (
    "SELECT m.record_id, m.source, m.label, r.file, r.position, m.group_id AS kept_record_id, k.source AS kept_source, "
    "k.label AS kept_label, CASE WHEN r.content_hash = k.content_hash THEN 'copy' "
    "WHEN x.supercell_index <> y.supercell_index THEN 'supercell' "
    "WHEN list_max(list_transform(range(1, 10), lambda i: abs(s.cell_angstrom[i] - t.cell_angstrom[i]))) < 1e-3 "
    "THEN 'rerun' ELSE 'other_cell' END AS reason, "
    "m.witness_shift_angstrom AS shift_angstrom, m.witness_strain AS strain "
    "FROM members m JOIN records r USING (record_id) JOIN records k ON k.record_id = m.group_id "
    "JOIN canonical_forms x ON x.record_id = m.record_id JOIN canonical_forms y ON y.record_id = m.group_id "
    "JOIN structures s ON s.record_id = m.record_id JOIN structures t ON t.record_id = m.group_id "
    "WHERE m.grade = ? AND NOT m.kept ORDER BY m.source, r.file, r.position, m.record_id"
)


@dataclass(frozen=True, slots=True)
class ExportCounts:
    """What an export wrote."""

    kept: int
    set_aside: int
    notes: tuple[str, ...]


def export(connection: duckdb.DuckDBPyConnection, folder: Path, grade: str, form: Form) -> ExportCounts:
    """Write the kept structures of a grade into a new folder; whole or not at all.

    cif: one file a kept record in structures/, in the cell it came in. csv, parquet: one table `structures`, with the
    input's own columns where the record came from a table whose file is still the one that was read, and ours prefixed
    `census_`. Beside it kept.csv, set_aside.csv and census.json. Raises UsageError (folder exists, no such grade).
    """
    if folder.exists():
        raise UsageError(f"{folder} exists already: export writes into a new folder.")
    if not one_row(connection, "SELECT 1 FROM members WHERE grade = ?", [grade]):
        grades = [g for (g,) in connection.execute("SELECT DISTINCT grade FROM members ORDER BY grade").fetchall()]
        raise UsageError(f"The store has no groups of grade {grade!r}; it has: {', '.join(grades) or 'none'}.")
    kept = _frame(connection, KEPT, grade)
    aside = _frame(connection, SET_ASIDE, grade)
    temporary = folder.with_name(f".{folder.name}.{os.getpid()}.new")
    shutil.rmtree(temporary, ignore_errors=True)
    temporary.mkdir(parents=True)
    notes: list[str] = []
    try:
        if form == "cif":
            kept = _write_cifs(connection, kept, temporary / "structures")
        else:
            from .export_table import write_table

            notes = write_table(connection, kept, temporary / f"structures.{form}", form)
        kept.write_csv(temporary / "kept.csv")
        aside.write_csv(temporary / "set_aside.csv")
        about = {
            "made_by": f"lattice-census {__version__}",
            "made_at": datetime.now(UTC).isoformat(timespec="seconds"),
            "grade": grade,
            "form": form,
            "kept": len(kept),
            "set_aside": len(aside),
            "store": dict(connection.execute("SELECT name, value FROM store_facts ORDER BY name").fetchall()),
            "settings": _settings(connection),
            "notes": notes,
            "caution": CAUTION,
        }
        (temporary / "census.json").write_text(json.dumps(about, indent=2) + "\n", encoding="utf-8")
        temporary.replace(folder)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)
    return ExportCounts(len(kept), len(aside), tuple(notes))


def _frame(connection: duckdb.DuckDBPyConnection, sql: str, grade: str) -> pl.DataFrame:
    frame: pl.DataFrame = connection.sql(sql, params=[grade]).pl()
    return frame


def _settings(connection: duckdb.DuckDBPyConnection) -> dict[str, Any]:
    return {
        name: json.loads(value)
        for name, value in connection.execute("SELECT name, value FROM stage_settings ORDER BY name").fetchall()
    }


def _write_cifs(connection: duckdb.DuckDBPyConnection, kept: pl.DataFrame, folder: Path) -> pl.DataFrame:
    """One CIF a kept record; returns `kept` with the column `written_as`."""
    folder.mkdir()
    names = file_names(kept["label"].to_list(), kept["record_id"].to_list())
    for start in range(0, len(kept), 2000):
        part = kept.slice(start, 2000)
        for record, name, structure in zip(
            part.iter_rows(named=True), names[start : start + 2000], given_structures(connection, part), strict=True
        ):
            cell, species, positions = structure
            extra = {
                "_census_record_id": record["record_id"],
                "_census_source": record["source"],
                "_census_label": record["label"],
            }
            text = cif_text(cell, positions, species, name=record["label"], extra=extra)
            (folder / name).write_text(text, encoding="utf-8")
    return kept.with_columns(pl.Series("written_as", names, dtype=pl.String))


def file_names(labels: list[str], record_ids: list[str], suffix: str = ".cif") -> list[str]:
    """A safe, distinct file name for each label: letters, digits, `.`, `_`, `+`, `-`; with the id where two agree."""
    safe = [re.sub(r"[^A-Za-z0-9._+-]+", "_", label).strip("._")[:80] or "record" for label in labels]
    folded = [name.casefold() for name in safe]
    used = Counter(folded)
    return [
        f"{name}{suffix}" if used[low] == 1 else f"{name}-{identity}{suffix}"
        for name, low, identity in zip(safe, folded, record_ids, strict=True)
    ]
