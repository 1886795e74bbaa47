-- Two families whose nearest records miss the limits of near by less than the window: look before you call them two.
SELECT
    'just_outside' AS code,
    t.record_a AS record_id,
    t.record_b AS other_record_id,
    'near' AS grade,
    NULL AS group_id,
    t.largest_shift_angstrom AS value,
    format('match with shift {:.4f} angstrom and strain {:.5f}, just outside near', t.largest_shift_angstrom, t.strain)
        AS message
FROM matches t
JOIN members a ON a.record_id = t.record_a AND a.grade = 'near'
JOIN members b ON b.record_id = t.record_b AND b.grade = 'near'
WHERE t.grade = 'window' AND a.family_id <> b.family_id
QUALIFY row_number() OVER (
    PARTITION BY least(a.family_id, b.family_id), greatest(a.family_id, b.family_id)
    ORDER BY t.largest_shift_angstrom, t.strain, t.record_a, t.record_b
) = 1
