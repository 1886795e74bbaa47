"""A small store written row by row, so that what a question has to answer can be counted by hand.

Twelve records of two sources, six crystals; ten records are current. The types, groups and symbols are what the text
books give for rutile, anatase and rock salt (from memory); the others are invented. Nothing is computed here.
"""

from __future__ import annotations

from datetime import datetime
from pathlib import Path
from typing import Any

import duckdb

from lattice_census.store.schema import migrate

CRYSTALS: dict[str, dict[str, Any]] = {
    "rutile": {
        "formula": "O2Ti", "anonymous": "A2B", "sites": 6, "volume": 10.0, "lattice_type": "tP", "crystal_type": "tP",
        "space_group": 136, "symbol": "P4_2/mnm", "pearson": "tP6", "wyckoff": "a f", "ladder": {},
    },
    "anatase": {
        "formula": "O2Ti", "anonymous": "A2B", "sites": 6, "volume": 11.0, "lattice_type": "tI", "crystal_type": "tI",
        "space_group": 141, "symbol": "I4_1/amd", "pearson": "tI12", "wyckoff": "a e", "ladder": {},
    },
    "nearly_cubic": {
        "formula": "O2Ti", "anonymous": "A2B", "sites": 3, "volume": 12.5, "lattice_type": "cP", "crystal_type": "tP",
        "space_group": 123, "symbol": "P4/mmm", "pearson": "tP3", "wyckoff": "a e", "pseudo": True, "unsure": True,
        "ladder": {},
    },
    "salt": {
        "formula": "ClNa", "anonymous": "AB", "sites": 2, "volume": 22.4, "lattice_type": "cF", "crystal_type": "cF",
        "space_group": 225, "symbol": "Fm-3m", "pearson": "cF8", "wyckoff": "a b", "ladder": {},
    },
    "sylvite": {
        "formula": "ClK", "anonymous": "AB", "sites": 2, "volume": 31.1, "lattice_type": "cF", "crystal_type": "cF",
        "space_group": 225, "symbol": "Fm-3m", "pearson": "cF8", "wyckoff": "a b", "ladder": {},
    },
    "leaning": {
        "formula": "Si", "anonymous": "A", "sites": 8, "volume": 20.0, "lattice_type": "mP", "crystal_type": "mP",
        "space_group": 14, "symbol": "P2_1/c", "pearson": "mP8", "wyckoff": "e e", "ladder": {"oP": 0.004, "tP": 0.012},
        "pseudo_index": 2, "pseudo_residual": 0.015,
    },
}  # fmt: skip

CUBE, LONG = (4.0, 5.0), (4.2, 5.2)
"""Edges of two given cells, in words of this module only."""

# number, source, label, crystal, content, primitive cells, edges, energy, theory, split
RECORDS: tuple[tuple[int, str, str, str, str, int, tuple[float, float], float | None, str | None, str | None], ...] = (
    (1, "alpha", "a1", "rutile", "c1", 1, CUBE, -8.00, "PBE", "train"),
    (2, "alpha", "a2", "rutile", "c1", 1, CUBE, -8.00, "PBE", "test"),
    (3, "beta", "b1", "rutile", "c3", 2, LONG, -8.02, "PBE", "train"),
    (4, "beta", "b2", "rutile", "c4", 1, (4.0002, 5.0), -9.00, "SCAN", None),
    (5, "alpha", "a3", "anatase", "c5", 1, CUBE, -8.10, "PBE", "train"),
    (6, "beta", "b3", "nearly_cubic", "c6", 1, CUBE, -7.90, "PBE", "validation"),
    (7, "alpha", "a4", "salt", "c7", 1, CUBE, None, None, "train"),
    (8, "beta", "b4", "salt", "c8", 1, LONG, None, None, "test"),
    (9, "alpha", "a5", "sylvite", "c9", 4, CUBE, None, None, "train"),
    (10, "beta", "b5", "leaning", "c10", 1, CUBE, -5.00, "PBE", "test"),
    (11, "alpha", "gone", "rutile", "c11", 1, CUBE, -8.00, "PBE", "train"),
    (12, "alpha", "bad", "rutile", "c12", 1, CUBE, -1.00, "PBE", "train"),
)

DAY = datetime(2031, 4, 5, 6, 7, 8)


def record_id(number: int) -> str:
    """The id of a record of RECORDS."""
    return f"{number:020x}"


def make_small_store(path: Path) -> Path:
    """Write the store."""
    connection = duckdb.connect(str(path))
    migrate(connection)
    _add_crystal_types(connection)
    for row in RECORDS:
        _add_record(connection, *row)
    _add_runs(connection)
    for grade, same in (("copy", "r.content_hash"), ("key", "x.crystal_key")):
        connection.execute(
            "INSERT INTO members SELECT $1, first_value(r.record_id) OVER w, first_value(r.record_id) OVER w, "
            "r.record_id, r.label, r.source, row_number() OVER w = 1, 0, 0 FROM current_records r "
            f"JOIN canonical_forms x USING (record_id) WINDOW w AS (PARTITION BY {same} ORDER BY r.source, r.label)",
            [grade],
        )
    connection.execute("INSERT INTO id_changes VALUES (4, 'key', ?, ?, ?, ?, ?)",
                       [record_id(3), record_id(12), record_id(1), record_id(1), record_id(1)])  # fmt: skip
    connection.execute(
        "INSERT INTO members SELECT 'near', $1, $1, record_id, label, source, record_id = $1, "
        "CASE WHEN record_id = $1 THEN 0 ELSE 0.03 END, CASE WHEN record_id = $1 THEN 0 ELSE 0.004 END "
        "FROM current_records WHERE record_id IN ($1, $2)",
        [record_id(5), record_id(6)],
    )
    connection.close()
    return path


def _add(connection: duckdb.DuckDBPyConnection, table: str, **values: Any) -> None:
    """Insert one row by column names; columns that are not named are NULL."""
    marks = ", ".join("?" for _ in values)
    connection.execute(f"INSERT INTO {table} ({', '.join(values)}) VALUES ({marks})", list(values.values()))


def _add_crystal_types(connection: duckdb.DuckDBPyConnection) -> None:
    for key, c in CRYSTALS.items():
        _add(
            connection, "crystal_types", crystal_key=key, lattice_type=c["lattice_type"],
            crystal_lattice_type=c["crystal_type"], space_group=c["space_group"], space_group_symbol=c["symbol"],
            pearson=c["pearson"], wyckoff=c["wyckoff"], pseudo_symmetric=c.get("pseudo", False),
            symmetry_unsure=c.get("unsure", False), **{f"strain_to_{t}": s for t, s in c["ladder"].items()},
        )  # fmt: skip


def _add_record(
    connection: duckdb.DuckDBPyConnection, number: int, source: str, label: str, crystal: str, content: str, cells: int,
    edges: tuple[float, float], energy: float | None, theory: str | None, split: str | None,
) -> None:  # fmt: skip
    c = CRYSTALS[crystal]
    a, b = edges
    elements = {"O2Ti": ["O", "Ti"], "ClNa": ["Cl", "Na"], "ClK": ["Cl", "K"], "Si": ["Si"]}[c["formula"]]
    _add(
        connection, "records", record_id=record_id(number), source=source, label=label, file=f"{source}.csv",
        position=number, content_hash=content, formula=c["formula"], formula_anonymous=c["anonymous"],
        elements=elements, sites_given=c["sites"] * cells, sites_primitive=c["sites"], periodicity=3,
        energy_ev_per_site=energy, theory=theory, split=split, record_date=DAY, properties="{}",
        first_run=3 if label == "b5" else 1, content_run=1, missing_since_run=3 if label == "gone" else None,
    )  # fmt: skip
    _add(
        connection, "canonical_forms", record_id=record_id(number), crystal_key=crystal,
        volume_angstrom3_per_site=c["volume"], supercell_index=cells, residual_angstrom=0.0,
        pseudo_index=c.get("pseudo_index", 1), pseudo_residual_angstrom=c.get("pseudo_residual", 0.0),
    )  # fmt: skip
    _add(
        connection, "structures", record_id=record_id(number), cell_angstrom=[a, 0, 0, 0, a, 0, 0, 0, b],
        species=["Si"], positions_fractional=[0.0, 0.0, 0.0],
    )  # fmt: skip


def _add_runs(connection: duckdb.DuckDBPyConnection) -> None:
    runs = ((1, "ingest", {"new": 11}), (2, "ingest", {"replaced": 1}), (3, "ingest", {"new": 1}),
            (4, "withdraw", {"withdrawn": 1}))  # fmt: skip
    for run, command, counts in runs:
        name, count = next(iter(counts.items()))
        _add(
            connection, "runs", run_id=run, command=command, arguments="{}", plan_hash=str(run), status="done",
            started_at=DAY, ended_at=DAY, version="1", settings="{}", counts=f'{{"{name}": {count}}}',
        )  # fmt: skip
    for source, kind in (("alpha", "file"), ("beta", "folder")):
        _add(connection, "sources", source=source, root=f"/in/{source}", kind=kind, settings="{}", first_run=1,
             last_run=3)  # fmt: skip
    for source, file, found, rejected in (("alpha", "alpha.csv", 9, 2), ("beta", "beta.csv", 5, 0),
                                          ("beta", "odd.cif", 1, 1)):  # fmt: skip
        _add(connection, "files", source=source, file=file, sha256="0", size_bytes=100, found=found,
             accepted=found - rejected, rejected=rejected, last_run=1)  # fmt: skip
    for source, file, position, label, reason in (
        ("alpha", "alpha.csv", 20, "flat", "cell_zero"),
        ("alpha", "alpha.csv", 21, "dense\x1b[31m", "sites_overlap"),
        ("beta", "odd.cif", 0, "odd", "cell_zero"),
    ):
        _add(connection, "rejects", source=source, file=file, position=position, label=label, stage="parse",
             reason=reason, message=f"message of {label}", run_id=1)  # fmt: skip
    _add(connection, "record_versions", record_id=record_id(5), version=1, change="amended", ended_by_run=3,
         content_hash="c5", crystal_key="anatase", energy_ev_per_site=-8.05, theory="PBE", split="train")  # fmt: skip
    _add(connection, "record_versions", record_id=record_id(6), version=1, change="replaced", ended_by_run=2,
         content_hash="c0", crystal_key="rutile", energy_ev_per_site=-7.00, theory="PBE", split="train")  # fmt: skip
    _add(connection, "withdrawals", withdrawal_id=1, record_id=record_id(12), reason="bad run", run_id=4, made_at=DAY,
         made_by="curator")  # fmt: skip
    _add(connection, "stage_settings", stage="keep", name="zeta", value="1")
    _add(connection, "decisions", decision_id=1, record_id=record_id(2), kept_record_id=record_id(1), grade="key",
         rule="date", reason="copy", witness_shift_angstrom=0.0, witness_strain=0.0, run_id=3, made_at=DAY,
         made_by="curator", undone_by_run=4, ending="undone")  # fmt: skip
    _add(connection, "decisions", decision_id=2, record_id=record_id(6), kept_record_id=record_id(5), grade="near",
         rule="energy", reason="rerun", witness_shift_angstrom=0.03, witness_strain=0.004, run_id=4, made_at=DAY,
         made_by="curator", note="looked at")  # fmt: skip
    _add(connection, "pins", pin_id=1, kind="keep", record_id=record_id(4), reason="best run", run_id=2, made_at=DAY,
         made_by="curator", removed_by_run=3)  # fmt: skip
    _add(connection, "pins", pin_id=2, kind="apart", record_id=record_id(7), other_record_id=record_id(8),
         reason="spins", run_id=3, made_at=DAY, made_by="curator")  # fmt: skip
    _add(connection, "matches", record_a=record_id(5), record_b=record_id(6), crystal_key_a="anatase",
         crystal_key_b="nearly_cubic", grade="near", largest_shift_angstrom=0.03, strain=0.004,
         reason="mirror")  # fmt: skip
    for name, value in (("near_shift", 0.05), ("near_strain", 0.01), ("window_factor", 1.5)):
        _add(connection, "stage_settings", stage="verify", name=name, value=str(value))
    _add(connection, "findings", code="leak", record_id=record_id(1), other_record_id=record_id(2), grade="key",
         group_id=record_id(1), value=2.0, message="one family stands in several splits")  # fmt: skip
    _add(connection, "findings", code="symmetry_failed", record_id=record_id(10), message="no cell found")
    _add(connection, "stage_settings", stage="parse", name="alpha", value="2.5")
