-- Every member is a current record, and has its label and source.
SELECT m.grade, m.record_id, m.source, m.label
FROM members m
LEFT JOIN current_records r USING (record_id)
WHERE r.record_id IS NULL OR m.label IS DISTINCT FROM r.label OR m.source IS DISTINCT FROM r.source
