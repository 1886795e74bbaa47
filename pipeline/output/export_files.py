"""The kept structures as files: CIF and POSCAR-style, one a structure; extended XYZ, one file of frames."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import duckdb
import polars as pl

from ..errors import UsageError
from .cif import cif_text
from .extxyz import extxyz_text
from .poscar import poscar_text
from .structures import given_structures

AT_A_TIME = 2000
"""Records whose structures are held in memory together."""

SUFFIXES = {"cif": ".cif", "poscar": ".vasp"}


def write_files(connection: duckdb.DuckDBPyConnection, kept: pl.DataFrame, folder: Path, form: str) -> pl.DataFrame:
    """Write `structures` in a form (cif, poscar, extxyz) into a folder; returns `kept` with the column `written_as`.

    kept: rows of selection.kept_rows; where they have the column `dealt_split`, each split has a folder or file of its
    own. Raises UsageError for a structure that the form cannot hold.
    """
    splits = kept["dealt_split"].to_list() if "dealt_split" in kept.columns else [None] * len(kept)
    if form == "extxyz":
        names = ["structures.extxyz" if split is None else f"structures.{split}.extxyz" for split in splits]
    else:
        plain = file_names(kept["label"].to_list(), kept["record_id"].to_list(), SUFFIXES[form])
        names = [
            f"structures/{name}" if split is None else f"structures/{split}/{name}"
            for name, split in zip(plain, splits, strict=True)
        ]
    for name in sorted({str(Path(name).parent) for name in names}):
        (folder / name).mkdir(parents=True, exist_ok=True)
    if form != "extxyz":
        (folder / "structures").mkdir(exist_ok=True)
    for start in range(0, len(kept), AT_A_TIME):
        part = kept.slice(start, AT_A_TIME)
        texts = _texts(connection, part, form)
        if form == "extxyz":
            for name in sorted(set(names[start : start + AT_A_TIME])):
                with (folder / name).open("a", encoding="utf-8") as f:
                    f.writelines(t for t, n in zip(texts, names[start : start + AT_A_TIME], strict=True) if n == name)
        else:
            for text, name in zip(texts, names[start : start + AT_A_TIME], strict=True):
                (folder / name).write_text(text, encoding="utf-8")
    written = [name.removeprefix("structures/") for name in names]
    return kept.with_columns(pl.Series("written_as", written, dtype=pl.String))


def _texts(connection: duckdb.DuckDBPyConnection, part: pl.DataFrame, form: str) -> list[str]:
    structures = given_structures(connection, part, "then_structures")
    return [
        _text(form, record, structure) for record, structure in zip(part.iter_rows(named=True), structures, strict=True)
    ]


def _text(form: str, record: Mapping[str, Any], structure: tuple[Any, list[str], Any]) -> str:
    cell, species, positions = structure
    label = record["label"]
    if form == "cif":
        extra = {
            "_census_record_id": record["record_id"],
            "_census_source": record["source"],
            "_census_label": label,
            **({"_census_periodic_directions": 2} if record["periodicity"] == 2 else {}),
        }
        return cif_text(cell, positions, species, name=label, extra=extra)
    facts = {"census_record_id": record["record_id"], "census_source": record["source"]}
    if form == "extxyz":
        measured = {name: record[name] for name in ("energy_ev_per_site", "theory", "split", "held")}
        return extxyz_text(cell, positions, species, label, {**facts, **measured}, record["periodicity"])
    try:
        return poscar_text(cell, positions, species, label, facts)
    except ValueError as error:
        raise UsageError(f"{record['source']}:{label}: {error}.") from error


def file_names(labels: list[str], record_ids: list[str], suffix: str = ".cif") -> list[str]:
    """A safe, distinct file name for each label: letters, digits, `.`, `_`, `+`, `-`; with the id where two agree."""
    safe = [re.sub(r"[^A-Za-z0-9._+-]+", "_", label).strip("._")[:80] or "record" for label in labels]
    folded = [name.casefold() for name in safe]
    used = Counter(folded)
    return [
        f"{name}{suffix}" if used[low] == 1 else f"{name}-{identity}{suffix}"
        for name, low, identity in zip(safe, folded, record_ids, strict=True)
    ]
