-- Why are the records that were set aside the same as the kept ones?
-- $grade GRADE = 'key': grade of the groups
SELECT p.reason,
       count(*) AS set_aside,
       count(*) FILTER (r.source = k.source) AS within_one_source,
       count(*) FILTER (r.source <> k.source) AS between_sources
FROM repeats p
JOIN records r USING (record_id)
JOIN records k ON k.record_id = p.kept_record_id
WHERE p.grade = $grade
GROUP BY p.reason
ORDER BY set_aside DESC, p.reason
