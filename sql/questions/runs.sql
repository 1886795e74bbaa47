-- Which runs wrote to this store?
SELECT run_id, command, status, started_at, ended_at, version, arguments, counts
FROM runs
ORDER BY run_id DESC
