-- A family lies in one family of the next looser grade: copy in key, key in same, same in near.
SELECT a.grade, a.family_id, b.grade AS looser_grade, min(b.family_id) AS family, max(b.family_id) AS other_family
FROM members a
JOIN members b ON b.record_id = a.record_id
              AND (a.grade, b.grade) IN (('copy', 'key'), ('key', 'same'), ('same', 'near'))
GROUP BY a.grade, a.family_id, b.grade
HAVING count(DISTINCT b.family_id) > 1
