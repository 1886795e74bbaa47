-- Findings and notes of further matches speak of current records alone.
SELECT place, record_id
FROM (
    SELECT 'findings' AS place, record_id FROM findings
    UNION ALL SELECT 'findings', other_record_id FROM findings
    UNION ALL SELECT 'more_matches', record_id FROM more_matches
)
WHERE record_id IS NOT NULL AND record_id NOT IN (SELECT record_id FROM current_records)
