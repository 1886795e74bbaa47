-- Which formulas have the most distinct crystals?
-- $least INTEGER = 2: only formulas with at least so many
SELECT r.formula,
       count(DISTINCT x.crystal_key) AS crystals,
       count(*) AS records,
       count(DISTINCT x.lattice_type) AS lattice_types,
       count(DISTINCT r.source) AS sources
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.formula
HAVING count(DISTINCT x.crystal_key) >= $least
ORDER BY crystals DESC, records DESC, r.formula
