-- Records of one family stand in different splits: what is trained on one is tested on the same crystal in another.
WITH chosen AS (
    SELECT CASE WHEN EXISTS (SELECT 1 FROM members WHERE grade = 'near') THEN 'near' ELSE 'key' END AS grade
),
of_split AS (
    SELECT m.grade, m.family_id, r.split, count(*) AS number, arg_min(m.record_id, x.rank) AS record_id,
           min(x.rank) AS rank
    FROM members m
    JOIN chosen USING (grade)
    JOIN records r USING (record_id)
    JOIN ranks x USING (record_id)
    WHERE r.split IS NOT NULL
      AND m.family_id IN (SELECT family_id FROM members WHERE record_id <> family_id)
    GROUP BY m.grade, m.family_id, r.split
)
SELECT
    'leak' AS code,
    arg_min(record_id, rank) AS record_id,
    (list(record_id ORDER BY rank))[2] AS other_record_id,
    grade,
    family_id AS group_id,
    count(*)::DOUBLE AS value,
    'one family stands in several splits: ' || string_agg(format('{} {}', split, number), ', ' ORDER BY split) AS message
FROM of_split
GROUP BY grade, family_id
HAVING count(*) > 1
