-- Are the lattice types spread alike over the splits?
SELECT r.split,
       x.lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       100.0 * count(*) / sum(count(*)) OVER (PARTITION BY r.split) AS share_of_split_percent
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.split, x.lattice_type
ORDER BY r.split NULLS LAST, records DESC, x.lattice_type
