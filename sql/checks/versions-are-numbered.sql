-- Earlier states of a record are numbered from 1 without a gap.
SELECT record_id, count(*) AS versions, min(version) AS first_version, max(version) AS last_version
FROM record_versions
GROUP BY record_id
HAVING min(version) <> 1 OR max(version) <> count(*) OR count(DISTINCT version) <> count(*)
