-- How far apart are the volumes per site inside each formula?
-- $least_ratio DOUBLE = 1: only formulas whose largest volume per site is at least so many times the smallest
SELECT r.formula,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       min(x.volume_angstrom3_per_site) AS least_volume_angstrom3_per_site,
       median(x.volume_angstrom3_per_site) AS median_volume_angstrom3_per_site,
       max(x.volume_angstrom3_per_site) AS largest_volume_angstrom3_per_site,
       max(x.volume_angstrom3_per_site) / min(x.volume_angstrom3_per_site) AS volume_ratio
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.formula
HAVING max(x.volume_angstrom3_per_site) >= $least_ratio * min(x.volume_angstrom3_per_site)
ORDER BY volume_ratio DESC, r.formula
