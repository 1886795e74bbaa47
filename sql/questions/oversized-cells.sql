-- How many given cells are larger than the primitive one, by how much, and where from?
SELECT r.source,
       x.supercell_index,
       count(*) AS records,
       sum(r.sites_given)::BIGINT AS sites_given,
       sum(r.sites_primitive)::BIGINT AS sites_primitive
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.supercell_index > 1
GROUP BY r.source, x.supercell_index
ORDER BY r.source, x.supercell_index
