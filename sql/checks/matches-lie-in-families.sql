-- Two keys that match at a grade lie in one family of it.
-- A record that is pinned apart from another or together with it is left out.
SELECT g.grade, m.record_a, m.record_b, a.family_id AS family, b.family_id AS other_family
FROM matches m
JOIN (VALUES ('same', 'same'), ('same', 'near'), ('near', 'near')) g (label, grade) ON g.label = m.grade
JOIN members a ON a.grade = g.grade AND a.record_id = m.record_a
JOIN members b ON b.grade = g.grade AND b.record_id = m.record_b
WHERE m.record_a NOT IN (SELECT record_id FROM pinned) AND m.record_b NOT IN (SELECT record_id FROM pinned)
  AND a.family_id IS DISTINCT FROM b.family_id
