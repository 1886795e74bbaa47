-- Why are the records that were set aside the same as the kept ones?
-- $grade GRADE = 'key': grade of the groups
WITH pairs AS (
    SELECT CASE
               WHEN r.content_hash = k.content_hash THEN 'copy'
               WHEN x.supercell_index <> y.supercell_index THEN 'supercell'
               WHEN list_max(list_transform(range(1, 10), lambda i: abs(s.cell_angstrom[i] - t.cell_angstrom[i]))) < 1e-3
                   THEN 'rerun'
               ELSE 'other_cell'
           END AS reason,
           m.source = k.source AS same_source
    FROM members m
    JOIN records r USING (record_id)
    JOIN records k ON k.record_id = m.group_id
    JOIN crystals x ON x.record_id = m.record_id
    JOIN crystals y ON y.record_id = m.group_id
    JOIN structures s ON s.record_id = m.record_id
    JOIN structures t ON t.record_id = m.group_id
    WHERE m.grade = $grade AND NOT m.kept
)
SELECT reason,
       count(*) AS set_aside,
       count(*) FILTER (same_source) AS within_one_source,
       count(*) FILTER (NOT same_source) AS between_sources
FROM pairs
GROUP BY reason
ORDER BY set_aside DESC, reason
