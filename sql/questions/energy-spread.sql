-- In which groups do energies of one level of theory disagree?
-- $grade GRADE = 'key': grade of the groups
-- $least DOUBLE = 0.005: only groups whose energies lie at least so far apart, in eV per site
SELECT m.group_id,
       r.formula,
       r.theory,
       count(*) AS records,
       count(DISTINCT m.source) AS sources,
       min(r.energy_ev_per_site) AS least_energy_ev_per_site,
       max(r.energy_ev_per_site) AS largest_energy_ev_per_site,
       max(r.energy_ev_per_site) - min(r.energy_ev_per_site) AS spread_ev_per_site
FROM members m
JOIN records r USING (record_id)
WHERE m.grade = $grade AND r.energy_ev_per_site IS NOT NULL
GROUP BY m.group_id, r.formula, r.theory
HAVING count(*) > 1 AND max(r.energy_ev_per_site) - min(r.energy_ev_per_site) >= $least
ORDER BY spread_ev_per_site DESC, m.group_id, r.theory NULLS LAST
