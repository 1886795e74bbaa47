"""Compositions to which records were only added since they were grouped: what was found of the old ones still holds.

Of those, pairs with a new record alone are compared, and only crystals are read that could match a new one by size and
by some of the stored mean distances (candidates.py, steps 1 and 2). Where the groups stand in place, only records that
something added can reach take part at all: new ones, those that could match one, and whatever is tied to them by a
match; no match leads out of that set, so the groups of all others stay as they are. A large composition of which
nothing tells whether it was about to be crowded is looked at whole, and so is one that could have become crowded
(composition.py).
"""

from __future__ import annotations

import math

import duckdb

from ..ingest.touched import settings_changed
from ..settings import Settings
from .composition import CROWDED, DENSE
from .outdated import LISTED, PINNED
from .preparation import transform_offset, transform_slack
from .window import near_window

SIZE = "coalesce({0}.volume_angstrom3_per_site, {0}.area_angstrom2_per_site)"
"""Volume per site, of layers area per site, of a row of `canonical_forms`."""

COLUMNS = (0, 1, 3, 5, 8, 11, 14, 20, 26, 33, 43, 53, 63)
"""Mean distances that are looked at, of the first and the last species."""

EQUAL_KEYS = 1e-4
"""What transformed mean distances of two crystals of one key may differ by: those of a key are stored once."""


def find_additions(connection: duckdb.DuckDBPyConnection, settings: Settings, everything: bool) -> None:
    """Make the temporary tables `added_compositions` (composition, most_candidates, close_pairs: of the earlier
    grouping; keys: all there are now; partly: not all of its records need to be looked at) of those in
    temp.changed_compositions, and `old_records` (record_id) of their records that were grouped.

    Where everything is to be made anew, or with other settings, nothing counts as added.
    """
    nothing = everything or settings_changed(connection, settings)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE earlier_compositions AS "
        "SELECT *, false AS in_place FROM outdated_compositions WHERE $some UNION ALL "
        f"SELECT *, true FROM ({LISTED}) WHERE $some "
        "AND composition IN (SELECT composition FROM changed_compositions) AND composition NOT IN (SELECT composition "
        "FROM grouped_compositions WHERE most_candidates > $crowded OR 2 * close_pairs > $dense * keys)",
        {"some": not nothing, "crowded": CROWDED, "dense": DENSE},
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
        "SELECT c.composition, o.most_candidates, o.close_pairs, c.keys, "
        "o.in_place AND (c.keys <= $crowded OR o.most_candidates IS NOT NULL) AS partly "
        "FROM changed_compositions c JOIN earlier_compositions o USING (composition) "
        "JOIN (SELECT composition, count(*) AS records FROM old_records GROUP BY composition) k USING (composition) "
        f"WHERE NOT c.plain AND k.records = o.records AND c.composition NOT IN ({PINNED})",
        {"crowded": CROWDED},
    )
    connection.execute("DELETE FROM old_records WHERE composition NOT IN (SELECT composition FROM added_compositions)")
    connection.execute("CREATE OR REPLACE TEMP TABLE needed_records (record_id VARCHAR)")
    connection.execute("CREATE OR REPLACE TEMP TABLE concerned_records (record_id VARCHAR, composition VARCHAR)")


def find_concerned(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make the temporary tables `concerned_records` (record_id, composition) of the records of temp.added_compositions
    that take part, and `needed_records` (record_id) of those whose crystals are to be read."""
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_records AS SELECT r.composition, r.record_id, f.crystal_key, "
        f"{SIZE.format('f')} AS size, o.record_id IS NULL AS new, m.record_id IS NOT NULL AS more, c.partly, "
        "c.keys > $crowded AND c.most_candidates IS NULL AS read "
        "FROM current_records r JOIN added_compositions c USING (composition) "
        "JOIN canonical_forms f USING (record_id) LEFT JOIN old_records o ON o.record_id = r.record_id "
        "LEFT JOIN more_matches m ON m.record_id = r.record_id",
        {"crowded": CROWDED},
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_nodes AS SELECT composition, crystal_key, min(record_id) AS record_id, "
        "arg_min(size, record_id) AS size, arg_min(new, record_id) AS new, bool_or(new) AS joined, "
        "bool_or(more) AS more, any_value(read) AS read FROM added_records GROUP BY composition, crystal_key"
    )
    _find_pairs(connection, settings)
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE links AS SELECT crystal_key_a AS a, crystal_key_b AS b FROM matches "
        "WHERE composition IN (SELECT composition FROM added_compositions WHERE partly) "
        # Of two that have more matches than are stored nobody knows whether they match.
        "UNION ALL SELECT crystal_key, 'more ' || composition FROM added_nodes WHERE more"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE reached AS WITH RECURSIVE reached(mark) AS ("
        "SELECT crystal_key FROM added_nodes WHERE joined UNION SELECT other FROM added_pairs "
        "UNION SELECT l.b FROM reached r JOIN (SELECT a, b FROM links UNION ALL SELECT b, a FROM links) l "
        "ON l.a = r.mark) SELECT mark FROM reached"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE concerned_records AS SELECT record_id, composition FROM added_records "
        "WHERE NOT partly OR crystal_key IN (SELECT mark FROM reached)"
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE needed_records AS "
        "SELECT record_id FROM added_nodes WHERE read OR more OR crystal_key IN "
        "(SELECT new FROM added_pairs UNION ALL SELECT other FROM added_pairs) "
        "UNION SELECT min(record_id) FROM concerned_records GROUP BY composition"  # so that there is a crystal at all
    )


def _find_pairs(connection: duckdb.DuckDBPyConnection, settings: Settings) -> None:
    """Make the temporary table `added_pairs` (new, other) of keys in temp.added_nodes that could match."""
    window, k = near_window(settings.tolerances), settings.fingerprint_k
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE sized_pairs AS SELECT n.crystal_key AS new, o.crystal_key AS other "
        "FROM added_nodes n JOIN added_nodes o ON o.composition = n.composition AND n.new "
        "AND (NOT o.new OR o.record_id < n.record_id) AND o.size BETWEEN n.size / $factor AND n.size * $factor",
        {"factor": math.exp(3.0 * window.strain) * (1.0 + 1e-9)},
    )
    # Of the first and the last species of each crystal; one without mean distances is ruled out by none.
    places = [c + 1 for c in COLUMNS if c < k] + [c - k for c in COLUMNS if c < k]
    means = [f"ln(mean_distances_angstrom[{place}] + $offset) AS y{i}" for i, place in enumerate(places)]
    agree = " AND ".join(f"coalesce(abs(n.y{i} - o.y{i}) <= $slack, true)" for i in range(len(places)))
    connection.execute(
        f"CREATE OR REPLACE TEMP TABLE means AS SELECT crystal_key, {', '.join(means)} FROM crystal_types "
        "WHERE crystal_key IN (SELECT new FROM sized_pairs UNION ALL SELECT other FROM sized_pairs)",
        {"offset": transform_offset(window.shift, window.strain)},
    )
    connection.execute(
        "CREATE OR REPLACE TEMP TABLE added_pairs AS SELECT p.new, p.other FROM sized_pairs p "
        f"LEFT JOIN means n ON n.crystal_key = p.new LEFT JOIN means o ON o.crystal_key = p.other WHERE {agree}",
        {"slack": transform_slack(window.strain) + EQUAL_KEYS},
    )
