-- No space group was found: the columns of the crystal's type are NULL, and the record stays.
SELECT
    'symmetry_failed' AS code,
    f.record_id,
    NULL AS other_record_id,
    NULL AS grade,
    NULL AS group_id,
    NULL::DOUBLE AS value,
    t.symmetry_failure AS message
FROM crystal_types t
JOIN canonical_forms f USING (crystal_key)
WHERE t.symmetry_failure IS NOT NULL
  AND f.record_id IN (SELECT record_id FROM current_records)
