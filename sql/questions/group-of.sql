-- Which records stand in one group with this record?
-- $record RECORD: the record, as its id or SOURCE:LABEL
-- $grade GRADE = 'key': grade of the groups
SELECT m.record_id,
       m.source,
       m.label,
       m.kept,
       r.formula,
       r.sites_given,
       r.theory,
       r.energy_ev_per_site,
       r.split,
       m.witness_shift_angstrom,
       m.witness_strain
FROM members m
JOIN records r USING (record_id)
WHERE m.grade = $grade
  AND m.group_id = (SELECT o.group_id FROM members o WHERE o.grade = $grade AND o.record_id = $record)
ORDER BY m.kept DESC, m.source, m.label, m.record_id
