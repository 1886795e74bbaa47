-- Which space groups are there, and which layer groups?
-- $source VARCHAR = NULL: only records of this source
SELECT x.space_group,
       x.layer_group,
       x.space_group_symbol,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       count(DISTINCT r.formula) AS formulas
FROM current_records r
JOIN crystals x USING (record_id)
WHERE $source::VARCHAR IS NULL OR r.source = $source
GROUP BY x.space_group, x.layer_group, x.space_group_symbol
ORDER BY records DESC, x.space_group NULLS LAST, x.layer_group, x.space_group_symbol
