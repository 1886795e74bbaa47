-- A file has as many records and refusals in the store as its row says, and none once it is gone.
-- Records that are gone from a file that is there are kept, and do not count; a member of an archive counts for the archive.
WITH places AS (
    SELECT source, file, count(*) AS accepted, 0 AS rejected
    FROM records WHERE missing_since_run IS NULL GROUP BY source, file
    UNION ALL
    SELECT source, file, 0, count(*) FROM rejects GROUP BY source, file
),
parents AS (
    SELECT source, accepted, rejected, unnest(list_transform(range(1, len(string_split(file, '/')) + 1),
        lambda n: array_to_string(string_split(file, '/')[1:n], '/'))) AS file
    FROM places
),
held AS (
    SELECT source, file, sum(accepted) AS accepted, sum(rejected) AS rejected FROM parents GROUP BY source, file
)
SELECT f.source, f.file, f.accepted, coalesce(h.accepted, 0) AS accepted_held, f.rejected,
       coalesce(h.rejected, 0) AS rejected_held
FROM files f
LEFT JOIN held h USING (source, file)
WHERE coalesce(h.accepted, 0) IS DISTINCT FROM if(f.missing_since_run IS NULL, f.accepted, 0)
   OR coalesce(h.rejected, 0) IS DISTINCT FROM if(f.missing_since_run IS NULL, f.rejected, 0)
