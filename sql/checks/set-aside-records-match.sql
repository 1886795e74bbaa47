-- Every record set aside at grade same or near has the key of its kept record, or a match with it within the limits of
-- the grade whose shift and strain stand beside it.
-- A record that is pinned apart from another or together with it is left out.
WITH pairs AS (
    SELECT m.grade, m.record_id, m.group_id, m.witness_shift_angstrom AS shift, m.witness_strain AS strain,
           least(f.crystal_key, k.crystal_key) AS low, greatest(f.crystal_key, k.crystal_key) AS high
    FROM members m
    LEFT JOIN canonical_forms f ON f.record_id = m.record_id
    LEFT JOIN canonical_forms k ON k.record_id = m.group_id
    WHERE m.grade IN ('same', 'near') AND NOT m.kept
      AND m.record_id NOT IN (SELECT record_id FROM pinned) AND m.group_id NOT IN (SELECT record_id FROM pinned)
),
found AS (
    SELECT g.grade, least(crystal_key_a, crystal_key_b) AS low, greatest(crystal_key_a, crystal_key_b) AS high,
           if(s.value = '"separate"', proper_shift_angstrom, largest_shift_angstrom) AS shift,
           if(s.value = '"separate"', proper_strain, strain) AS strain
    FROM matches m
    JOIN (VALUES ('same', 'same'), ('same', 'near'), ('near', 'near')) g (label, grade) ON g.label = m.grade
    LEFT JOIN stage_settings s ON s.stage = 'verify' AND s.name = 'mirror_images'
    WHERE m.record_a NOT IN (SELECT record_id FROM pinned) AND m.record_b NOT IN (SELECT record_id FROM pinned)
)
SELECT p.grade, p.record_id, p.group_id, p.shift AS shift_stated, f.shift AS shift_found, p.strain AS strain_stated,
       f.strain AS strain_found
FROM pairs p
LEFT JOIN found f ON f.grade = p.grade AND f.low = p.low AND f.high = p.high
WHERE CASE WHEN p.low = p.high THEN p.shift IS DISTINCT FROM 0 OR p.strain IS DISTINCT FROM 0
           ELSE f.low IS NULL OR p.shift IS DISTINCT FROM f.shift OR p.strain IS DISTINCT FROM f.strain END
