"""Groups of equal content and key, made anew only where something happened, are those made anew everywhere."""

from __future__ import annotations

import shutil
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np

from lattice_census.flows.deciding import pin, undo, unpin, withdraw
from lattice_census.grouping.update import update_exact_groups
from lattice_census.ingest import touched
from lattice_census.settings import Settings
from lattice_census.store.connect import open_for_writing
from lattice_census.store.stages import settings_of_store

from .curated import OF_SOURCE, copies, row
from .tables_of_structures import query, write_csv

MEMBERS = "SELECT grade, record_id, group_id, family_id, label, source, kept FROM members ORDER BY ALL"
IDS = "SELECT grade, record_id, group_id, family_id FROM members"
NOTED = (
    "SELECT grade, record_id, group_before, family_before, group_after, family_after FROM id_changes WHERE run_id > ?"
)
TYPES = "SELECT crystal_key, typed_record_id FROM crystal_types ORDER BY 1"
OF_KEYS = "SELECT crystal_key, min(record_id) FROM canonical_forms GROUP BY 1 ORDER BY 1"
ONE_KEY = (  # two records of one group that no pin names, kept ones last
    "SELECT a.record_id, b.record_id FROM members a JOIN members b USING (grade, group_id) WHERE grade = 'key' "
    "AND a.record_id < b.record_id AND NOT EXISTS (SELECT 1 FROM pins WHERE pins.record_id = a.record_id) "
    "ORDER BY a.kept OR b.kept, 1, 2"
)
KINDS = (
    "grow", "replace", "keep", "apart", "withdraw", "amend", "drop", "replace", "together", "apart", "undo", "unpin",
    "grow", "withdraw all", "drop", "undo",
)  # fmt: skip


def test_random_steps_give_the_groups_of_making_all_anew(tmp_path: Path, ingest, monkeypatch):
    """After each step ids changed as members say, and making all groups anew changes nothing."""
    rng = np.random.default_rng(3)
    crystals = [crystal for _, _, crystal in copies(3, 3, noise=0.0)]  # of one composition
    rows: list[dict[str, Any]] = []
    table, store, again = tmp_path / "t.csv", tmp_path / "census.duckdb", tmp_path / "again.duckdb"
    before: dict[tuple[str, str], tuple[str, str]] = {}
    run = told = 0
    withdrawn = ""
    for kind in KINDS:
        if kind == "grow":
            chosen = rng.integers(len(crystals), size=8).tolist()
            rows += [row(f"m-{len(rows) + n}", crystals[i], energy=-float(n % 3)) for n, i in enumerate(chosen)]
        name = f"t.csv:{rows[int(rng.integers(len(rows)))]['material_id']}"
        if kind == "replace":
            for i, j in rng.integers(len(rows), size=(4, 2)).tolist():
                rows[i]["cif"] = rows[j]["cif"]
        elif kind == "amend":
            for i in rng.integers(len(rows), size=4).tolist():
                rows[i]["energy"] = -4.0 - i
        elif kind == "drop":
            del rows[int(rng.integers(len(rows)))]

        if kind in ("grow", "replace", "amend", "drop"):
            ingest(write_csv(table, rows), of_source=OF_SOURCE)
        elif kind in ("withdraw", "withdraw all"):
            withdrawn = name if kind == "withdraw" else "t.csv"
            withdraw(store, withdrawn, "a test")
        elif kind == "undo":
            undo(store, withdrawn)
        elif kind == "keep":
            pin(store, kind, [name], "a test")
        elif kind in ("apart", "together"):
            pin(store, kind, query(store, ONE_KEY)[0], "a test")
        else:
            unpin(store, query(store, "SELECT max(pin_id) FROM pins_in_force WHERE kind = 'apart'")[0][0])

        now = {(grade, record): (group, family) for grade, record, group, family in query(store, IDS)}
        expected = {(*k, *v, *now.get(k, (None, None))) for k, v in before.items() if now.get(k) != v}
        noted = query(store, NOTED, run)
        assert set(noted) == expected and len(noted) == len(expected), kind
        assert query(store, TYPES) == query(store, OF_KEYS)
        shutil.copyfile(store, again)
        settings = Settings.model_validate(settings_of_store(store))
        run = query(store, "SELECT max(run_id) FROM runs")[0][0]
        with monkeypatch.context() as patched, closing(open_for_writing(again)) as connection:
            patched.setattr(touched, "_since", lambda *_: None)
            update_exact_groups(connection, run + 1, settings)
        assert query(again, MEMBERS) == query(store, MEMBERS) and query(again, NOTED, run) == [], kind
        before, told = now, told + len(noted)
    assert told > 50
