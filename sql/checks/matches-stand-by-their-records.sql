-- A match stands once, for two keys of one grouped composition, each by its current record with the smallest id, in order.
-- A record that is pinned apart from another or together with it stands for itself, and is left out.
WITH stands AS (
    SELECT f.crystal_key, min(r.record_id) AS record_id, any_value(r.composition) AS composition
    FROM current_records r JOIN canonical_forms f USING (record_id)
    WHERE r.record_id NOT IN (SELECT record_id FROM pinned) GROUP BY f.crystal_key
)
SELECT m.record_a, m.record_b, m.composition
FROM matches m
LEFT JOIN stands a ON a.crystal_key = m.crystal_key_a
LEFT JOIN stands b ON b.crystal_key = m.crystal_key_b
WHERE m.record_a NOT IN (SELECT record_id FROM pinned) AND m.record_b NOT IN (SELECT record_id FROM pinned)
QUALIFY count(*) OVER (PARTITION BY m.record_a, m.record_b) > 1
     OR m.record_a IS DISTINCT FROM a.record_id OR m.record_b IS DISTINCT FROM b.record_id
     OR m.record_a >= m.record_b
     OR m.composition IS DISTINCT FROM a.composition OR m.composition IS DISTINCT FROM b.composition
     OR m.composition NOT IN (SELECT composition FROM grouped_compositions)
