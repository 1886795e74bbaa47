-- A family of several groups: nearness is not transitive, and its ends do not match each other directly.
SELECT
    'chain' AS code,
    min_by(m.group_id, x.rank) AS record_id,
    NULL AS other_record_id,
    m.grade,
    m.family_id AS group_id,
    count(DISTINCT m.group_id)::DOUBLE AS value,
    format('a family of {} records falls into {} groups at grade {}: its ends do not match each other directly',
        count(*), count(DISTINCT m.group_id), m.grade) AS message
FROM members m
JOIN chains c ON c.grade = m.grade AND c.family_id = m.family_id
JOIN ranks x USING (record_id)
GROUP BY m.grade, m.family_id
