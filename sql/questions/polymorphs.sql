-- Which distinct crystals of one formula are there, and which lies lowest in energy?
-- $formula FORMULA: the formula
-- $theory VARCHAR = NULL: energies of this level of theory only
SELECT x.crystal_key,
       x.lattice_type,
       x.space_group_symbol,
       x.pearson,
       r.sites_primitive,
       median(x.volume_angstrom3_per_site) AS volume_angstrom3_per_site,
       r.theory,
       min(r.energy_ev_per_site) AS least_energy_ev_per_site,
       min(r.energy_ev_per_site)
           - min(min(r.energy_ev_per_site)) OVER (PARTITION BY r.theory) AS above_lowest_ev_per_site,
       count(*) AS records,
       min_by(r.source || ':' || r.label, (coalesce(r.energy_ev_per_site, 'inf'::DOUBLE), r.source, r.label)) AS example
FROM current_records r
JOIN crystals x USING (record_id)
WHERE r.formula = $formula
  AND ($theory::VARCHAR IS NULL OR r.theory = $theory)
GROUP BY x.crystal_key, x.lattice_type, x.space_group_symbol, x.pearson, r.sites_primitive, r.theory
ORDER BY r.theory NULLS LAST, least_energy_ev_per_site NULLS LAST, x.crystal_key
