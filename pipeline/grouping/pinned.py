"""Pins in the grouping: which of them concern a composition, and groups of equal records that a pin parts.

Pins name records. `keep` works through the rank; `apart` forbids a pair, also of one key; `together` joins a pair that
matches in the window, though not at the grade. A pair pinned both ways is left to the geometry, and its groups are held
(decisions/holds.py).
"""

from __future__ import annotations

import duckdb
import numpy as np

from .digest import PAIR_PINS
from .graph import components


def part_pinned(connection: duckdb.DuckDBPyConnection, grade: str) -> None:
    """Part the groups of grade copy or key in temp.now_members whose records are pinned apart.

    As stars in keep order (groups.py), where every pair of the group matches but those pinned apart; families are the
    components of that graph. With temp.ranks made.
    """
    rows = connection.execute(
        f"SELECT DISTINCT a.family_id, p.record_a, p.record_b FROM {PAIR_PINS} p "
        "JOIN now_members a ON a.grade = $1 AND a.record_id = p.record_a "
        "JOIN now_members b ON b.grade = $1 AND b.record_id = p.record_b AND b.family_id = a.family_id "
        "WHERE p.kind = 'apart' ORDER BY ALL",
        [grade],
    ).fetchall()
    for family in sorted({row[0] for row in rows}):
        listed = connection.execute(
            "SELECT m.record_id, k.rank FROM now_members m JOIN ranks k USING (record_id) "
            "WHERE m.grade = ? AND m.family_id = ? ORDER BY m.record_id",
            [grade, family],
        ).fetchall()
        ids = [record for record, _ in listed]
        best = min(listed, key=lambda row: int(row[1]))[0]
        apart = {(a, b) for of, a, b in rows if of == family}
        kept = _stars([record for record, _ in sorted(listed, key=lambda row: row[1])], apart)
        families = _families(ids, apart)
        other = [
            (kept[record], families[record], kept[record] == record, grade, record)
            for record in ids
            if families[record] != family or kept[record] != best
        ]
        if other:
            connection.executemany(
                "UPDATE now_members SET group_id = ?, family_id = ?, kept = ? WHERE grade = ? AND record_id = ?", other
            )


def _stars(order: list[str], apart: set[tuple[str, str]]) -> dict[str, str]:
    """The kept record of each record: taken in keep order, each keeps all that are free and not pinned apart."""
    kept: dict[str, str] = {}
    for record in order:
        if record in kept:
            continue
        for other in order:
            if other not in kept and (min(record, other), max(record, other)) not in apart:
                kept[other] = record
    return kept


def _families(ids: list[str], apart: set[tuple[str, str]]) -> dict[str, str]:
    """The family of each of the records (ascending). A record that no pin names joins all."""
    named = {record for pair in apart for record in pair}
    if len(named) < len(ids):
        return dict.fromkeys(ids, ids[0])
    places = [(i, j) for j in range(len(ids)) for i in range(j) if (ids[i], ids[j]) not in apart]
    label = components(len(ids), np.array(places, dtype=np.int64).reshape(-1, 2))
    return {record: ids[label[i]] for i, record in enumerate(ids)}
