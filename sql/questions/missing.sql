-- Which records are gone from their files?
SELECT record_id, source, label, file, formula, missing_since_run
FROM records
WHERE missing_since_run IS NOT NULL
ORDER BY missing_since_run DESC, source, file, position, record_id
