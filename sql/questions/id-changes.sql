-- Which records changed their group or family?
-- $grade GRADE = NULL: only this grade
-- $run INTEGER = NULL: only changes of this run
SELECT c.run_id, c.grade, c.record_id, r.source, r.label, c.group_before, c.group_after, c.family_before, c.family_after
FROM id_changes c
LEFT JOIN records r USING (record_id)
WHERE ($grade::VARCHAR IS NULL OR c.grade = $grade)
  AND ($run::BIGINT IS NULL OR c.run_id = $run)
ORDER BY c.run_id DESC, c.grade, r.source, r.label, c.record_id
