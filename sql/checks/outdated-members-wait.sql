-- Rows of members that wait for `group` are of records that have no newer ones.
SELECT o.grade, o.record_id, o.group_id
FROM outdated_members o
JOIN members m ON m.grade = o.grade AND m.record_id = o.record_id
