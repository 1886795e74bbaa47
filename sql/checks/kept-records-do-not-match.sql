-- No two kept records of one family at grade same or near have one key, or a match within the limits of the grade.
-- A record that is pinned apart from another or together with it is left out.
WITH kept AS (
    SELECT m.grade, m.family_id, m.record_id, f.crystal_key
    FROM members m JOIN canonical_forms f USING (record_id)
    WHERE m.kept AND m.grade IN ('same', 'near') AND m.record_id NOT IN (SELECT record_id FROM pinned)
)
SELECT g.grade, a.record_id, b.record_id AS other_record_id, m.largest_shift_angstrom, m.strain
FROM matches m
JOIN (VALUES ('same', 'same'), ('same', 'near'), ('near', 'near')) g (label, grade) ON g.label = m.grade
JOIN kept a ON a.grade = g.grade AND a.crystal_key = m.crystal_key_a
JOIN kept b ON b.grade = g.grade AND b.crystal_key = m.crystal_key_b AND b.family_id = a.family_id
WHERE m.record_a NOT IN (SELECT record_id FROM pinned) AND m.record_b NOT IN (SELECT record_id FROM pinned)
UNION ALL
SELECT a.grade, a.record_id, b.record_id, 0, 0
FROM kept a JOIN kept b USING (grade, family_id, crystal_key)
WHERE a.record_id < b.record_id
