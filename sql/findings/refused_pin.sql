-- Two records are pinned together, and they do not match even in the window: the pin takes no part.
SELECT
    'refused_pin' AS code,
    p.record_id,
    p.other_record_id,
    NULL AS grade,
    NULL AS group_id,
    p.pin_id::DOUBLE AS value,
    format('pin {} ({}) takes no part: {}', p.pin_id, p.reason,
        CASE WHEN a.composition <> b.composition THEN 'the two records have different compositions'
             ELSE 'the two records do not match, not even just outside near' END) AS message
FROM pins_in_force p
JOIN current_records a ON a.record_id = p.record_id
JOIN current_records b ON b.record_id = p.other_record_id
WHERE p.kind = 'together'
  AND (a.composition <> b.composition OR p.pin_id IN (SELECT pin_id FROM refused_pins))
