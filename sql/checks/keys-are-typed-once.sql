-- A key stands once in crystal_types.
SELECT crystal_key, count(*) AS times
FROM crystal_types
GROUP BY crystal_key
HAVING count(*) > 1
