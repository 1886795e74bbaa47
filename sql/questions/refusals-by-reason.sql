-- Why were records refused?
-- $source VARCHAR = NULL: only this source
SELECT reason,
       stage,
       count(*) AS refused,
       count(DISTINCT source) AS sources,
       count(DISTINCT (source, file)) AS files,
       min_by(message, (source, file, position)) AS first_message
FROM rejects
WHERE $source::VARCHAR IS NULL OR source = $source
GROUP BY reason, stage
ORDER BY refused DESC, reason, stage
