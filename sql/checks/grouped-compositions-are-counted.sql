-- A grouped composition is there once and counts its current records and their keys.
SELECT g.composition, g.records, g.keys, n.records AS records_held, n.keys AS keys_held
FROM grouped_compositions g
LEFT JOIN (
    SELECT r.composition, count(*) AS records, count(DISTINCT f.crystal_key) AS keys
    FROM current_records r JOIN canonical_forms f USING (record_id) GROUP BY r.composition
) n USING (composition)
QUALIFY count(*) OVER (PARTITION BY g.composition) > 1
     OR g.records IS DISTINCT FROM n.records OR g.keys IS DISTINCT FROM n.keys
