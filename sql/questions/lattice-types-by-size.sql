-- Which lattice types are there at each number of sites of the primitive cell?
SELECT r.sites_primitive,
       x.lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals
FROM current_records r
JOIN crystals x USING (record_id)
GROUP BY r.sites_primitive, x.lattice_type
ORDER BY r.sites_primitive, records DESC, x.lattice_type
