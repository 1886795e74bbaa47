-- Where do the type of the lattice alone and the type that the crystal's symmetry allows differ?
-- $all BOOLEAN = false: show also where they agree
SELECT x.lattice_type,
       x.crystal_lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals
FROM current_records r
JOIN crystals x USING (record_id)
WHERE $all OR x.lattice_type <> x.crystal_lattice_type
GROUP BY x.lattice_type, x.crystal_lattice_type
ORDER BY records DESC, x.lattice_type, x.crystal_lattice_type
