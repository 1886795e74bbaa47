-- Which earlier states did a record have, and what is it now?
-- $record RECORD: the record, as its id or SOURCE:LABEL
SELECT version, change, ended_by_run, crystal_key, energy_ev_per_site, theory, split, record_date, content_hash
FROM record_versions
WHERE record_id = $record
UNION ALL
SELECT 1 + (SELECT count(*) FROM record_versions v WHERE v.record_id = r.record_id),
       'present', NULL, x.crystal_key, r.energy_ev_per_site, r.theory, r.split, r.record_date, r.content_hash
FROM records r
JOIN crystals x USING (record_id)
WHERE r.record_id = $record
ORDER BY version
