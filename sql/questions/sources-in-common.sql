-- How many groups do two sources have in common?
-- $grade GRADE = 'key': grade of the groups
WITH held AS (
    SELECT DISTINCT group_id, source
    FROM members
    WHERE grade = $grade
)
SELECT a.source AS source_a,
       b.source AS source_b,
       count(*) AS groups_in_common,
       (SELECT count(*) FROM held h WHERE h.source = a.source) AS groups_a,
       (SELECT count(*) FROM held h WHERE h.source = b.source) AS groups_b
FROM held a
JOIN held b ON a.group_id = b.group_id AND a.source < b.source
GROUP BY a.source, b.source
ORDER BY groups_in_common DESC, source_a, source_b
