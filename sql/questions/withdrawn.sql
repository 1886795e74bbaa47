-- Which records are withdrawn, and why?
SELECT w.record_id, w.source, w.label, w.reason, d.made_by, d.made_at, d.run_id
FROM withdrawn_records w
JOIN withdrawals d USING (withdrawal_id)
ORDER BY d.withdrawal_id, w.source, w.label, w.record_id
