-- A group lies in one family.
SELECT grade, group_id, min(family_id) AS family, max(family_id) AS other_family
FROM members
GROUP BY grade, group_id
HAVING count(DISTINCT family_id) <> 1
