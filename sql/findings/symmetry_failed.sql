-- No space group was found: the columns of the crystal's type are NULL, and the record stays.
SELECT
    'symmetry_failed' AS code,
    r.record_id,
    NULL AS other_record_id,
    NULL AS grade,
    NULL AS group_id,
    NULL::DOUBLE AS value,
    t.symmetry_failure AS message
FROM current_records r
JOIN canonical_forms f USING (record_id)
JOIN crystal_types t USING (crystal_key)
WHERE t.symmetry_failure IS NOT NULL
