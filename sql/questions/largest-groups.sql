-- Which groups hold the most records?
-- $grade GRADE = 'key': grade of the groups
-- $least INTEGER = 2: only groups of at least so many records
SELECT m.group_id,
       k.source || ':' || k.label AS kept_record,
       k.formula,
       count(*) AS records,
       count(DISTINCT m.source) AS sources
FROM members m
JOIN records k ON k.record_id = m.group_id
WHERE m.grade = $grade
GROUP BY m.group_id, k.source, k.label, k.formula
HAVING count(*) >= $least
ORDER BY records DESC, m.group_id
