-- Which lattice types does each source hold?
SELECT r.source,
       x.lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       100.0 * count(*) / sum(count(*)) OVER (PARTITION BY r.source) AS share_of_source_percent
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.source, x.lattice_type
ORDER BY r.source, records DESC, x.lattice_type
