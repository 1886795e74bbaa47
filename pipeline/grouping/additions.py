"""Compositions to which records were only added since they were grouped: what was found of the old ones still holds.

Of those, pairs with a new record alone are compared, and only crystals that such a pair could match are read: a small
composition's by their size (candidates.py, step 2), all of a composition that could become crowded (crowds.py).
"""

from __future__ import annotations

import math

import duckdb

from ..ingest.touched import settings_changed
from ..settings import Settings
from .composition import CROWDED
from .outdated import PINNED
from .window import near_window

SIZE = "coalesce({0}.volume_angstrom3_per_site, {0}.area_angstrom2_per_site)"
"""Volume per site, of layers area per site, of a row of `canonical_forms`."""


def find_additions(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool) -> None:
    """Make the temporary tables `added_compositions` (composition) of those in temp.changed_compositions, `old_records`
    (record_id) of their records that were grouped, and `needed_records` (record_id) of those whose crystals are to be
    read.

    Where everything is to be made anew, or with other settings, nothing counts as added.
    """
    possible = "SELECT * FROM outdated_compositions"
    if everything or settings_changed(connection, settings):
        possible += " WHERE false"
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE old_records AS SELECT r.record_id, r.composition FROM current_records r "
        f"JOIN ({possible}) o ON o.composition = r.composition AND r.changed_run < o.run_id "
        "WHERE r.record_id IN (SELECT record_id FROM outdated_members WHERE grade = 'near')"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_compositions AS SELECT c.composition, c.records "
        f"FROM changed_compositions c JOIN ({possible}) o USING (composition) "
        "JOIN (SELECT composition, count(*) AS records FROM old_records GROUP BY composition) k USING (composition) "
        f"WHERE NOT c.plain AND k.records = o.records AND c.composition NOT IN ({PINNED})"
    )
    connection.execute("DELETE FROM old_records WHERE composition NOT IN (SELECT composition FROM added_compositions)")
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_nodes AS SELECT r.composition, min(r.record_id) AS record_id, "
        f"arg_min({SIZE.format('f')}, r.record_id) AS size, "
        "arg_min(o.record_id IS NULL, r.record_id) AS new, any_value(c.records) AS records "
        "FROM current_records r JOIN added_compositions c USING (composition) "
        "JOIN canonical_forms f USING (record_id) LEFT JOIN old_records o ON o.record_id = r.record_id "
        "GROUP BY r.composition, f.crystal_key"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE needed_records AS "
        "SELECT o.record_id FROM added_nodes o JOIN added_nodes n ON n.composition = o.composition AND n.new "
        "AND o.size BETWEEN n.size / $factor AND n.size * $factor WHERE o.records <= $crowded "
        "UNION SELECT record_id FROM added_nodes WHERE new OR records > $crowded "
        "UNION SELECT min(record_id) FROM added_nodes GROUP BY composition",  # so that there is a crystal at all
        {
            "factor": math.exp(3.0 * near_window(settings.tolerances).strain) * (1.0 + 1e-9),
            "crowded": CROWDED,
        },
    )
