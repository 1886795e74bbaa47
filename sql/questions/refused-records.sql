-- Which records were refused, where, and with which message?
-- $reason VARCHAR = NULL: only this reason code
-- $source VARCHAR = NULL: only this source
SELECT source, file, position, label, stage, reason, message
FROM rejects
WHERE ($reason::VARCHAR IS NULL OR reason = $reason)
  AND ($source::VARCHAR IS NULL OR source = $source)
ORDER BY source, file, position, label
