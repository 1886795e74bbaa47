-- Between which levels of theory do the duplicates lie?
-- $grade GRADE = 'key': grade of the groups
SELECT k.theory AS kept_theory,
       r.theory AS set_aside_theory,
       count(*) AS set_aside,
       count(DISTINCT m.group_id) AS groups
FROM members m
JOIN records r USING (record_id)
JOIN records k ON k.record_id = m.group_id
WHERE m.grade = $grade AND NOT m.kept
GROUP BY k.theory, r.theory
ORDER BY set_aside DESC, kept_theory NULLS LAST, set_aside_theory NULLS LAST
