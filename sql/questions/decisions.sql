-- Which records were set aside, in favour of which, by which rule?
-- $grade GRADE = NULL: only decisions at this grade
-- $record RECORD = NULL: only decisions about this record, or in favour of it
-- $ended BOOLEAN = false: also those that are not in force any more
SELECT d.decision_id,
       a.source || ':' || a.label AS record,
       b.source || ':' || b.label AS kept_record,
       d.grade,
       d.rule,
       d.reason,
       d.witness_shift_angstrom AS shift_angstrom,
       d.witness_strain AS strain,
       d.run_id,
       d.made_by,
       d.note,
       d.ending,
       d.undone_by_run
FROM decisions d
JOIN records a ON a.record_id = d.record_id
JOIN records b ON b.record_id = d.kept_record_id
WHERE ($grade IS NULL OR d.grade = $grade)
  AND ($record IS NULL OR d.record_id = $record OR d.kept_record_id = $record)
  AND ($ended OR d.undone_by_run IS NULL)
ORDER BY d.decision_id
