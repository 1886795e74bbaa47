-- Energies of one level of theory in a group lie too far apart: the group is held, and no record of it is set aside.
WITH chosen AS (
    SELECT CASE WHEN EXISTS (SELECT 1 FROM members WHERE grade = 'near') THEN 'near' ELSE 'key' END AS grade
)
SELECT
    'energy_conflict' AS code,
    arg_min(r.record_id, (r.energy_ev_per_site, r.record_id)) AS record_id,
    arg_max(r.record_id, (r.energy_ev_per_site, r.record_id)) AS other_record_id,
    m.grade,
    m.group_id,
    max(r.energy_ev_per_site) - min(r.energy_ev_per_site) AS value,
    format('{} energies of {} in one group spread over {:.4f} eV per site', count(*),
        coalesce(r.theory, 'one theory without a name'), max(r.energy_ev_per_site) - min(r.energy_ev_per_site)) AS message
FROM members m
JOIN chosen USING (grade)
JOIN records r USING (record_id)
WHERE r.energy_ev_per_site IS NOT NULL
  AND m.group_id IN (SELECT group_id FROM members WHERE NOT kept)
GROUP BY m.grade, m.group_id, r.theory
HAVING max(r.energy_ev_per_site) - min(r.energy_ev_per_site) > $energy_conflict
