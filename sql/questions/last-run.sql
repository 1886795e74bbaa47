-- What did the last run do?
SELECT run_id, command, status, started_at, ended_at, c.key AS what, c.value AS number
FROM (SELECT * FROM runs ORDER BY run_id DESC LIMIT 1) AS r
LEFT JOIN json_each(r.counts) AS c ON true
ORDER BY c.id
