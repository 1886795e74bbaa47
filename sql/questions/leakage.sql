-- How many groups, and records of them, do two splits have in common?
-- $grade GRADE = 'key': grade of the groups
WITH held AS (
    SELECT m.group_id,
           r.split,
           count(*) AS records
    FROM members m
    JOIN records r USING (record_id)
    WHERE m.grade = $grade AND r.split IS NOT NULL
    GROUP BY m.group_id, r.split
)
SELECT a.split,
       b.split AS other_split,
       count(*) AS groups_in_common,
       sum(a.records)::BIGINT AS records_in_split,
       sum(b.records)::BIGINT AS records_in_other,
       100.0 * sum(a.records) / (SELECT sum(h.records) FROM held h WHERE h.split = a.split) AS share_of_split_percent
FROM held a
JOIN held b ON a.group_id = b.group_id AND a.split <> b.split
GROUP BY a.split, b.split
ORDER BY a.split, other_split
