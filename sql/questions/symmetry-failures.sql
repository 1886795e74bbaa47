-- For which records was no space group found, and why?
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       r.sites_primitive,
       x.lattice_type,
       x.symmetry_failure
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.symmetry_failure IS NOT NULL
ORDER BY r.source, r.label, r.record_id
