-- Every record and every refusal belongs to exactly one file of its source.
WITH places AS (
    SELECT DISTINCT source, file FROM records
    UNION SELECT DISTINCT source, file FROM rejects
),
parents AS (
    SELECT source, file, unnest(list_transform(range(1, len(string_split(file, '/')) + 1),
        lambda n: array_to_string(string_split(file, '/')[1:n], '/'))) AS parent
    FROM places
)
SELECT p.source, p.file, count(f.file) AS files
FROM parents p
LEFT JOIN files f ON f.source = p.source AND f.file = p.parent
GROUP BY p.source, p.file
HAVING count(f.file) <> 1
