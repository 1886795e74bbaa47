-- Which levels of theory are there, and how many of their records have an energy?
SELECT r.theory,
       r.source,
       count(*) AS records,
       count(r.energy_ev_per_site) AS with_energy,
       min(r.energy_ev_per_site) AS least_energy_ev_per_site,
       max(r.energy_ev_per_site) AS largest_energy_ev_per_site
FROM current_records r
GROUP BY r.theory, r.source
ORDER BY r.theory NULLS LAST, r.source
