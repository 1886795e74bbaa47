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
    """Seconds of a night with one worker and with two; with them started beforehand, and with all."""
    count = options.count(20_000)
    path = options.file or collection(options.scratch, Kind(), count, options.workers)
    # Enough chunks for two workers even in a small collection.
    chunk = max(50, min(2000, count // 16))
    nights: dict[int, list[Night]] = {1: [], 2: []}
    for _ in range(options.times(3)):
        for workers, done in nights.items():
            store = fresh(options.scratch / f"workers-{workers}.duckdb")
            done.append(run_night(path, store, workers, ready_workers=True, watch_memory=False, chunk_records=chunk))
    compare(nights[1][-1].store, nights[2][-1].store)
    one, two = (Seconds(tuple(n.work_s for n in nights[w])) for w in (1, 2))
    gain = [a / b for a, b in zip(one.taken, two.taken, strict=True)]
    all_one, all_two = (Seconds(tuple(n.seconds for n in nights[w])) for w in (1, 2))
    return Report(
        "workers",
        {"records": count, "chunk_records": chunk},
        (
            one.figure("night, one worker, start-up apart"),
            two.figure("night, two workers, start-up apart"),
            Seconds(tuple(n.start_up_s for n in nights[2])).figure("start-up with two workers"),
            Figure("one / two, start-up apart", one.median / two.median, "x", min(gain), max(gain), 1.7, at_least=True),
            Figure("one / two, whole", all_one.median / all_two.median, "x"),
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
