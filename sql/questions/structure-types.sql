-- Which kinds of structure (anonymous formula, space group, Pearson symbol, Wyckoff letters) recur across formulas?
-- $least INTEGER = 2: only kinds that at least so many formulas take
SELECT r.formula_anonymous,
       x.space_group,
       x.layer_group,
       x.space_group_symbol,
       x.pearson,
       x.wyckoff,
       count(DISTINCT r.formula) AS formulas,
       count(DISTINCT x.crystal_key) AS crystals,
       count(*) AS records
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.space_group_symbol IS NOT NULL
GROUP BY ALL
HAVING count(DISTINCT r.formula) >= $least
ORDER BY formulas DESC, crystals DESC, r.formula_anonymous, x.space_group, x.layer_group, x.space_group_symbol,
         x.pearson, x.wyckoff
