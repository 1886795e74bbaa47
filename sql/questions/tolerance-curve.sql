-- How many families would there be at t times the limits of near, pins left aside?
-- $step DOUBLE = 0.125: t goes up to the window in steps of this
WITH RECURSIVE limits AS (
    SELECT max(try_cast(value AS DOUBLE)) FILTER (name = 'near_shift') AS shift,
           max(try_cast(value AS DOUBLE)) FILTER (name = 'near_strain') AS strain,
           max(try_cast(value AS DOUBLE)) FILTER (name = 'window_factor') AS window_factor,
           coalesce(bool_or(name = 'mirror_images' AND value::VARCHAR = '"separate"'), false) AS separate
    FROM stage_settings
    WHERE stage = 'verify' AND name IN ('near_shift', 'near_strain', 'window_factor', 'mirror_images')
),
steps AS (
    SELECT i * $step AS t
    FROM limits, unnest(range(0, least(floor(window_factor / $step + 1e-9)::BIGINT, 200) + 1)) AS u(i)
    WHERE $step > 0 AND window_factor IS NOT NULL
),
keys AS (
    SELECT DISTINCT f.crystal_key
    FROM members m
    JOIN canonical_forms f USING (record_id)
    WHERE m.grade = 'near'
),
pairs AS (
    SELECT m.crystal_key_a,
           m.crystal_key_b,
           CASE WHEN l.separate
                THEN greatest(m.proper_shift_angstrom / l.shift, m.proper_strain / l.strain)
                ELSE greatest(m.largest_shift_angstrom / l.shift, m.strain / l.strain)
           END AS t
    FROM matches m, limits l
),
edges AS (
    SELECT s.t, p.crystal_key_a AS node, p.crystal_key_b AS other
    FROM steps s JOIN pairs p ON p.t <= s.t
    UNION ALL
    SELECT s.t, p.crystal_key_b, p.crystal_key_a
    FROM steps s JOIN pairs p ON p.t <= s.t
),
labels(t, node, label) USING KEY (t, node) AS (
    SELECT e.t, e.node, least(e.node, min(e.other)) FROM edges e GROUP BY e.t, e.node
    UNION
    SELECT l.t, l.node, min(o.label)
    FROM recurring.labels l
    JOIN edges e ON e.t = l.t AND e.node = l.node
    JOIN labels o ON o.t = e.t AND o.node = e.other
    WHERE o.label < l.label
    GROUP BY l.t, l.node
)
SELECT s.t,
       s.t * l.shift AS shift_angstrom,
       s.t * l.strain AS strain,
       (SELECT count(*) FROM keys) - count(c.node) + count(DISTINCT c.label) AS families
FROM steps s
CROSS JOIN limits l
LEFT JOIN labels c ON c.t = s.t
GROUP BY s.t, l.shift, l.strain
ORDER BY s.t
