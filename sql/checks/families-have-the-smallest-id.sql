-- A family is named by its smallest record id.
SELECT grade, family_id, min(record_id) AS smallest
FROM members
GROUP BY grade, family_id
HAVING min(record_id) IS DISTINCT FROM family_id
