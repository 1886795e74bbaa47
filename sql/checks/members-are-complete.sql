-- Every current record stands in exactly one group of grades copy and key, and of same and near where its composition
-- is grouped; of any other grade in no more than one.
WITH wanted AS (
    SELECT record_id, unnest(['copy', 'key']) AS grade FROM current_records
    UNION ALL
    SELECT record_id, unnest(['same', 'near']) FROM current_records
    WHERE composition IN (SELECT composition FROM grouped_compositions)
),
held AS (
    SELECT record_id, grade, count(*) AS groups FROM members GROUP BY record_id, grade
)
SELECT coalesce(w.record_id, h.record_id) AS record_id, coalesce(w.grade, h.grade) AS grade, coalesce(h.groups, 0) AS groups
FROM wanted w
FULL JOIN held h ON h.record_id = w.record_id AND h.grade = w.grade
WHERE (w.grade IS NOT NULL AND coalesce(h.groups, 0) <> 1) OR h.groups > 1
