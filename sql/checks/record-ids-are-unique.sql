-- A record id stands once in records, in structures and in canonical_forms.
SELECT place, record_id, count(*) AS times
FROM (
    SELECT 'records' AS place, record_id FROM records
    UNION ALL SELECT 'structures', record_id FROM structures
    UNION ALL SELECT 'canonical_forms', record_id FROM canonical_forms
)
GROUP BY place, record_id
HAVING count(*) > 1
