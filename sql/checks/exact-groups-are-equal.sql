-- Records share a group of grade copy where their content is equal, and of grade key where their keys are.
-- Equal records of which one is pinned apart from another are left out.
WITH truth AS (
    SELECT 'copy' AS grade, record_id, min(record_id) OVER alike AS first_id,
           bool_or(record_id IN (SELECT record_id FROM pinned)) OVER alike AS parted
    FROM current_records
    WINDOW alike AS (PARTITION BY content_hash)
    UNION ALL
    SELECT 'key', r.record_id, min(r.record_id) OVER alike, bool_or(r.record_id IN (SELECT record_id FROM pinned)) OVER alike
    FROM current_records r JOIN canonical_forms f USING (record_id)
    WINDOW alike AS (PARTITION BY f.crystal_key)
)
SELECT t.grade, t.record_id, m.group_id, g.group_id AS group_of_equal
FROM truth t
JOIN members m ON m.grade = t.grade AND m.record_id = t.record_id
JOIN members g ON g.grade = t.grade AND g.record_id = t.first_id
WHERE m.group_id IS DISTINCT FROM g.group_id AND NOT t.parted
UNION ALL
SELECT m.grade, min(m.record_id), m.group_id, max(m.record_id)
FROM members m
JOIN truth t ON t.grade = m.grade AND t.record_id = m.record_id
GROUP BY m.grade, m.group_id
HAVING count(DISTINCT t.first_id) > 1
