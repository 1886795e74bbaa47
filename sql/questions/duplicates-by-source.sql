-- Which sources repeat which?
-- $grade GRADE = 'key': grade of the groups
SELECT k.source AS kept_source,
       m.source AS set_aside_source,
       count(*) AS set_aside,
       count(DISTINCT m.group_id) AS groups
FROM members m
JOIN members k ON k.grade = m.grade AND k.record_id = m.group_id
WHERE m.grade = $grade AND NOT m.kept
GROUP BY k.source, m.source
ORDER BY set_aside DESC, kept_source, set_aside_source
