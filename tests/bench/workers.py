"""Two workers against one on the same table, and the outcome of both compared row by row."""

from __future__ import annotations

from pathlib import Path

import duckdb

from .collection import Kind
from .figures import Figure, Options, Report
from .night import Night, collection, fresh, run_night
from .timing import Seconds

COMPARED = {
    "members": "grade, group_id, family_id, record_id, kept, witness_shift_angstrom, witness_strain",
    "matches": "record_a, record_b, grade, largest_shift_angstrom, strain, reason, p_matrix, q_matrix",
    "canonical_forms": "record_id, crystal_key, cell_angstrom, positions_fractional",
    "decisions": "record_id, kept_record_id, grade, rule, reason",
}


def run(options: Options) -> Report:
    """Seconds of a night without start-up, with one worker and with two."""
    count = options.count(20_000)
    path = options.file or collection(options.scratch, Kind(), count, options.workers)
    # Enough chunks for two workers even in a small collection.
    chunk = max(50, min(2000, count // 16))
    nights: dict[int, list[Night]] = {1: [], 2: []}
    for _ in range(options.times(3)):
        for workers, done in nights.items():
            store = fresh(options.scratch / f"workers-{workers}.duckdb")
            done.append(run_night(path, store, workers, chunk_records=chunk))
    compare(nights[1][-1].store, nights[2][-1].store)
    one, two = (Seconds(tuple(n.work_s for n in nights[w])) for w in (1, 2))
    gain = [a / b for a, b in zip(one.taken, two.taken, strict=True)]
    return Report(
        "workers",
        {"records": count, "chunk_records": chunk, "start-up apart": f"{nights[2][-1].start_up_s:.4g} s"},
        (
            one.figure("night, one worker"),
            two.figure("night, two workers"),
            Figure("one worker / two", one.median / two.median, "x", min(gain), max(gain), 1.7, at_least=True),
        ),
        {f"stages_{w}_s": done[-1].stages for w, done in nights.items()},
    )


def compare(one: Path, other: Path) -> None:
    """Raises AssertionError where two stores differ in a table of COMPARED."""
    connection = duckdb.connect()
    try:
        for name, path in (("one", one), ("other", other)):
            connection.execute(f"ATTACH '{str(path).replace(chr(39), 2 * chr(39))}' AS {name} (READ_ONLY)")
        for table, columns in COMPARED.items():
            for a, b in (("one", "other"), ("other", "one")):
                query = f"SELECT count(*) FROM (SELECT {columns} FROM {a}.{table} EXCEPT ALL "
                ((left,),) = connection.execute(query + f"SELECT {columns} FROM {b}.{table})").fetchall()
                assert left == 0, f"{left} rows of {table} differ between one worker and two"
    finally:
        connection.close()
