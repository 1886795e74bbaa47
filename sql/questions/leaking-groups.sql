-- Which groups have records in more than one split?
-- $grade GRADE = 'key': grade of the groups
SELECT m.group_id,
       min(r.formula) AS formula,
       count(DISTINCT r.split) AS splits,
       count(*) AS records,
       list(DISTINCT r.split ORDER BY r.split) AS split_names,
       list(m.source || ':' || m.label ORDER BY r.split, m.source, m.label)[:6] AS first_records
FROM members m
JOIN records r USING (record_id)
WHERE m.grade = $grade AND r.split IS NOT NULL
GROUP BY m.group_id
HAVING count(DISTINCT r.split) > 1
ORDER BY records DESC, m.group_id
