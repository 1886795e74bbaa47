"""Compositions to which records were only added since they were grouped: what was found of the old ones still holds.

Of those, pairs with a new record alone are compared, and only crystals are read that could match a new one by size and
by some of the stored mean distances (candidates.py, steps 1 and 2); but all of a large composition of which nothing
tells whether it was about to be crowded. Where it could have become so (composition.py), it is compared as a whole.
"""

from __future__ import annotations

import math

import duckdb

from ..ingest.touched import settings_changed
from ..settings import Settings
from .composition import CROWDED
from .outdated import COMPLETE, PINNED
from .preparation import transform_offset, transform_slack
from .window import near_window

SIZE = "coalesce({0}.volume_angstrom3_per_site, {0}.area_angstrom2_per_site)"
"""Volume per site, of layers area per site, of a row of `canonical_forms`."""

COLUMNS = (0, 1, 3, 5, 8, 11, 14, 20, 26, 33, 43, 53, 63)
"""Mean distances that are looked at, of the first and the last species."""

EQUAL_KEYS = 1e-4
"""What transformed mean distances of two crystals of one key may differ by: those of a key are stored once."""


def find_additions(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool) -> None:
    """Make the temporary tables `added_compositions` (composition, records, most_candidates, close_pairs: of the
    earlier grouping) of those in temp.changed_compositions, and `old_records` (record_id) of their records that were
    grouped.

    Where everything is to be made anew, or with other settings, nothing counts as added.
    """
    nothing = everything or settings_changed(connection, settings)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE earlier_compositions AS "
        "SELECT * FROM outdated_compositions WHERE $some UNION ALL "
        f"SELECT * FROM ({COMPLETE}) WHERE $some AND composition IN (SELECT composition FROM changed_compositions)",
        {"some": not nothing},
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE old_records AS SELECT r.record_id, r.composition FROM current_records r "
        "JOIN earlier_compositions o ON o.composition = r.composition AND r.changed_run < o.run_id "
        "WHERE r.record_id IN (SELECT record_id FROM outdated_members WHERE grade = 'near') "
        "OR r.record_id IN (SELECT record_id FROM members WHERE grade = 'near' AND record_id IN (SELECT record_id "
        "FROM records WHERE composition IN (SELECT composition FROM earlier_compositions)))"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_compositions AS "
        "SELECT c.composition, c.records, o.most_candidates, o.close_pairs "
        "FROM changed_compositions c JOIN earlier_compositions o USING (composition) "
        "JOIN (SELECT composition, count(*) AS records FROM old_records GROUP BY composition) k USING (composition) "
        f"WHERE NOT c.plain AND k.records = o.records AND c.composition NOT IN ({PINNED})"
    )
    connection.execute("DELETE FROM old_records WHERE composition NOT IN (SELECT composition FROM added_compositions)")
    connection.execute("CREATE OR REPLACE TEMP TABLE needed_records (record_id VARCHAR)")


def find_needed(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make the temporary table `needed_records` (record_id) of records whose crystals are to be read, from those of
    `find_additions`."""
    window, k = near_window(settings.tolerances), settings.fingerprint_k
    # Of the first and the last species of each crystal; one without mean distances is ruled out by none.
    places = [c + 1 for c in COLUMNS if c < k] + [c - k for c in COLUMNS if c < k]
    means = [f"ln(t.mean_distances_angstrom[{place}] + $offset) AS y{i}" for i, place in enumerate(places)]
    agree = " AND ".join(f"coalesce(abs(n.y{i} - o.y{i}) <= $slack, true)" for i in range(len(places)))
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE added_nodes AS SELECT g.*, {', '.join(means)} FROM ("
        "SELECT r.composition, f.crystal_key, min(r.record_id) AS record_id, "
        f"arg_min({SIZE.format('f')}, r.record_id) AS size, arg_min(o.record_id IS NULL, r.record_id) AS new "
        "FROM current_records r JOIN added_compositions c USING (composition) "
        "JOIN canonical_forms f USING (record_id) LEFT JOIN old_records o ON o.record_id = r.record_id "
        "GROUP BY r.composition, f.crystal_key) g LEFT JOIN crystal_types t USING (crystal_key)",
        {"offset": transform_offset(window.shift, window.strain)},
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_pairs AS SELECT n.composition, n.record_id AS new, o.record_id AS other "
        "FROM added_nodes n JOIN added_nodes o ON o.composition = n.composition AND n.new "
        "AND (NOT o.new OR o.record_id < n.record_id) AND o.size BETWEEN n.size / $factor AND n.size * $factor "
        f"WHERE {agree}",
        {
            "factor": math.exp(3.0 * window.strain) * (1.0 + 1e-9),
            "slack": transform_slack(window.strain) + EQUAL_KEYS,
        },
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE needed_records AS "
        "SELECT new AS record_id FROM added_pairs UNION SELECT other FROM added_pairs "
        "UNION SELECT n.record_id FROM added_nodes n JOIN added_compositions c USING (composition) "
        "WHERE n.new OR (c.records > $crowded AND c.most_candidates IS NULL) "
        "UNION SELECT min(record_id) FROM added_nodes GROUP BY composition",  # so that there is a crystal at all
        {"crowded": CROWDED},
    )
