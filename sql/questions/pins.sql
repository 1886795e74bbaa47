-- Which pins did curators set, and why?
-- $removed BOOLEAN = false: also those that were removed
SELECT p.pin_id,
       p.kind,
       a.source || ':' || a.label AS record,
       b.source || ':' || b.label AS other_record,
       p.reason,
       p.made_by,
       p.made_at,
       p.run_id,
       p.removed_by_run
FROM pins p
JOIN records a ON a.record_id = p.record_id
LEFT JOIN records b ON b.record_id = p.other_record_id
WHERE $removed OR p.removed_by_run IS NULL
ORDER BY p.pin_id
