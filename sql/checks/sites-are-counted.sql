-- Given sites are so many primitive cells of primitive sites, and every list over sites has their length.
SELECT r.record_id, r.sites_given, r.sites_primitive, f.supercell_index
FROM records r
JOIN structures s USING (record_id)
JOIN canonical_forms f USING (record_id)
WHERE r.sites_given IS DISTINCT FROM f.supercell_index * r.sites_primitive
   OR r.sites_given IS DISTINCT FROM len(s.species)
   OR r.sites_primitive IS DISTINCT FROM len(f.species)
   OR len(s.positions_fractional) IS DISTINCT FROM 3 * len(s.species)
   OR len(f.positions_fractional) IS DISTINCT FROM 3 * len(f.species)
   OR len(f.site_map) IS DISTINCT FROM len(s.species)
   OR len(f.site_shift) IS DISTINCT FROM 3 * len(s.species)
