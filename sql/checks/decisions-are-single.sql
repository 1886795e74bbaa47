-- A record has at most one decision in force at a grade, and none in favour of itself.
SELECT record_id, grade, count(*) AS in_force
FROM decisions
WHERE undone_by_run IS NULL
GROUP BY record_id, grade
HAVING count(*) > 1 OR count(*) FILTER (WHERE record_id = kept_record_id) > 0
ORDER BY record_id, grade
