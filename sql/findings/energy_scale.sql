-- An energy is a whole number of times those of its group, and that number is its sites: it looks like a total.
WITH chosen AS (
    SELECT CASE WHEN EXISTS (SELECT 1 FROM members WHERE grade = 'near') THEN 'near' ELSE 'key' END AS grade
),
energies AS (
    SELECT m.grade, m.group_id, r.record_id, r.theory, r.energy_ev_per_site AS energy, r.sites_given, r.sites_primitive
    FROM members m
    JOIN chosen USING (grade)
    JOIN records r USING (record_id)
    WHERE r.energy_ev_per_site IS NOT NULL
      AND m.group_id IN (SELECT group_id FROM members WHERE NOT kept)
),
others AS (
    SELECT e.record_id, median(o.energy) AS middle, count(*) AS number
    FROM energies e
    JOIN energies o ON o.grade = e.grade AND o.group_id = e.group_id AND o.theory IS NOT DISTINCT FROM e.theory
        AND o.record_id <> e.record_id
    GROUP BY e.record_id
)
SELECT
    'energy_scale' AS code,
    e.record_id,
    NULL AS other_record_id,
    e.grade,
    e.group_id,
    e.energy / o.middle AS value,
    format('its energy per site is {:.3f} times that of the {} others of its theory in the group, and it has {} sites: '
        'it looks like the energy of the whole cell', e.energy / o.middle, o.number,
        CASE WHEN abs(e.energy / o.middle / e.sites_given - 1) < 0.02 THEN e.sites_given ELSE e.sites_primitive END)
        AS message
FROM energies e
JOIN others o USING (record_id)
WHERE o.middle <> 0
  AND ((e.sites_given > 1 AND abs(e.energy / o.middle / e.sites_given - 1) < 0.02)
    OR (e.sites_primitive > 1 AND abs(e.energy / o.middle / e.sites_primitive - 1) < 0.02))
