-- What does each source hold that no other does?
-- $grade GRADE = 'key': grade of the groups
WITH held AS (
    SELECT group_id,
           source,
           count(*) AS records,
           count(*) OVER (PARTITION BY group_id) AS sources
    FROM members
    WHERE grade = $grade
    GROUP BY group_id, source
)
SELECT source,
       sum(records)::BIGINT AS records,
       count(*) AS groups,
       count(*) FILTER (sources = 1) AS groups_only_here,
       100.0 * count(*) FILTER (sources = 1) / count(*) AS only_here_percent
FROM held
GROUP BY source
ORDER BY source
