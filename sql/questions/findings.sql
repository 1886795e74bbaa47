-- What was found that a curator must see?
-- $code VARCHAR = NULL: only findings of this code
-- $source VARCHAR = NULL: only findings about a record of this source
SELECT f.code,
       a.source || ':' || a.label AS record,
       b.source || ':' || b.label AS other_record,
       f.grade,
       f.value,
       f.message,
       f.record_id,
       f.other_record_id
FROM findings f
LEFT JOIN records a ON a.record_id = f.record_id
LEFT JOIN records b ON b.record_id = f.other_record_id
WHERE ($code IS NULL OR f.code = $code)
  AND ($source IS NULL OR a.source = $source OR b.source = $source)
ORDER BY f.code, f.value DESC NULLS LAST, f.record_id, f.other_record_id, f.grade, f.message
