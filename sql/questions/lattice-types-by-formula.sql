-- Which lattice types does each formula take?
-- $least INTEGER = 1: only formulas with at least so many distinct crystals
WITH counted AS (
    SELECT r.formula,
           x.lattice_type,
           count(*) AS records,
           count(DISTINCT x.crystal_key) AS crystals
    FROM current_records r
    JOIN crystals x USING (record_id)
    GROUP BY r.formula, x.lattice_type
)
SELECT *
FROM counted
QUALIFY sum(crystals) OVER (PARTITION BY formula) >= $least
ORDER BY sum(crystals) OVER (PARTITION BY formula) DESC, formula, crystals DESC, lattice_type
