-- Which lattice types are there, in records and in distinct crystals?
-- $source VARCHAR = NULL: only records of this source
-- $formula FORMULA = NULL: only records of this formula
SELECT x.lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       100.0 * count(*) / sum(count(*)) OVER () AS share_percent
FROM current_records r
JOIN crystals x USING (record_id)
WHERE ($source::VARCHAR IS NULL OR r.source = $source)
  AND ($formula::VARCHAR IS NULL OR r.formula = $formula)
GROUP BY x.lattice_type
ORDER BY records DESC, x.lattice_type
