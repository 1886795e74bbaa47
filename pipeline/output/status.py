"""What a store holds, in numbers. Read-only."""

from __future__ import annotations

import json
from typing import Any

import duckdb

from ..store.rows import one_number, one_row


def status(connection: duckdb.DuckDBPyConnection) -> dict[str, Any]:
    """Counts of records, groups, decisions, findings and refusals, the sources, and the last runs; ready for JSON."""
    row = one_row(
        connection,
        "SELECT (SELECT count(*) FROM records), (SELECT count(*) FROM current_records), "
        "(SELECT count(*) FROM records WHERE missing_since_run IS NOT NULL), "
        "(SELECT count(*) FROM withdrawn_records), (SELECT count(*) FROM rejects), "
        "(SELECT count(DISTINCT formula) FROM current_records)",
    )
    names = ("records", "current", "missing", "withdrawn", "rejected", "formulas")
    out: dict[str, Any] = dict(zip(names, map(int, row or ()), strict=True))
    out["groups"] = [
        {"grade": grade, "groups": groups, "set_aside": aside, "largest": largest}
        for grade, groups, aside, largest in connection.execute(
            "SELECT grade, count(DISTINCT group_id), count(*) FILTER (NOT kept), "
            "(SELECT max(n) FROM (SELECT count(*) AS n FROM members i WHERE i.grade = m.grade GROUP BY group_id)) "
            "FROM members m GROUP BY grade "
            "ORDER BY list_position(['copy', 'key', 'same', 'near', 'rescaled', 'isotypic'], grade)"
        ).fetchall()
    ]
    out["findings"] = dict(
        connection.execute("SELECT code, count(*) FROM findings GROUP BY code ORDER BY code").fetchall()
    )
    out["decisions"] = dict(
        connection.execute("SELECT grade, count(*) FROM decisions_in_force GROUP BY grade ORDER BY grade").fetchall()
    )
    out["held"] = dict(
        connection.execute("SELECT reason, count(*) FROM holds GROUP BY reason ORDER BY reason").fetchall()
    )
    out["pins"] = one_number(connection, "SELECT count(*) FROM pins_in_force")
    out["refusals"] = dict(
        connection.execute("SELECT reason, count(*) FROM rejects GROUP BY reason ORDER BY 2 DESC, 1").fetchall()
    )
    out["sources"] = [
        {"source": source, "kind": kind, "root": root, "files": files, "records": records, "rejected": rejected}
        for source, kind, root, files, records, rejected in connection.execute(
            "SELECT s.source, s.kind, s.root, (SELECT count(*) FROM files f WHERE f.source = s.source), "
            "(SELECT count(*) FROM records r WHERE r.source = s.source), "
            "(SELECT count(*) FROM rejects j WHERE j.source = s.source) FROM sources s ORDER BY s.source"
        ).fetchall()
    ]
    out["runs"] = [
        {"run": run, "command": command, "status": state, "started_at": str(begun), "ended_at": ended and str(ended),
         "counts": json.loads(counts) if counts else None}
        for run, command, state, begun, ended, counts in connection.execute(
            "SELECT run_id, command, status, started_at, ended_at, counts FROM runs ORDER BY run_id DESC LIMIT 5"
        ).fetchall()
    ]  # fmt: skip
    return out
