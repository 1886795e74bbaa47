-- What share of each source has a lattice of more symmetry than its crystal?
SELECT r.source,
       count(*) AS records,
       count(*) FILTER (x.pseudo_symmetric) AS pseudo_symmetric,
       100.0 * count(*) FILTER (x.pseudo_symmetric) / count(*) AS share_percent,
       count(DISTINCT x.crystal_key) AS crystals,
       count(DISTINCT x.crystal_key) FILTER (x.pseudo_symmetric) AS pseudo_symmetric_crystals
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.source
ORDER BY r.source
