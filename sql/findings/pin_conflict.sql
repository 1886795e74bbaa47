-- Pins contradict each other: the groups are held until one of them is removed.
SELECT
    'pin_conflict' AS code,
    h.group_id AS record_id,
    NULL AS other_record_id,
    h.grade,
    h.group_id,
    NULL::DOUBLE AS value,
    h.message
FROM holds h
WHERE h.reason = 'pin_conflict'
  AND h.grade = (SELECT CASE WHEN EXISTS (SELECT 1 FROM members WHERE grade = 'near') THEN 'near' ELSE 'key' END)
