-- Which sources are there, and what came of them?
SELECT s.source,
       s.kind,
       s.root,
       (SELECT count(*) FROM files f WHERE f.source = s.source AND f.missing_since_run IS NULL) AS files,
       (SELECT count(*) FROM records r WHERE r.source = s.source) AS records,
       (SELECT count(*) FROM current_records r WHERE r.source = s.source) AS in_results,
       (SELECT count(*) FROM rejects j WHERE j.source = s.source) AS refused,
       s.last_run
FROM sources s
ORDER BY s.source
