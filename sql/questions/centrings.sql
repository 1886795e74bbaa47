-- How are the lattices centred?
-- $source VARCHAR = NULL: only records of this source
SELECT substr(x.lattice_type, 2, 1) AS centring,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       100.0 * count(*) / sum(count(*)) OVER () AS share_percent
FROM current_records r
JOIN crystals x USING (record_id)
WHERE $source::VARCHAR IS NULL OR r.source = $source
GROUP BY centring
ORDER BY records DESC, centring
