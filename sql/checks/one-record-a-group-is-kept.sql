-- A group holds the record that it is named by, and keeps this one alone.
SELECT m.grade, m.record_id, m.group_id, m.kept
FROM members m
LEFT JOIN members k ON k.grade = m.grade AND k.record_id = m.group_id AND k.group_id = m.group_id
WHERE m.kept IS DISTINCT FROM (m.record_id = m.group_id) OR k.record_id IS NULL
