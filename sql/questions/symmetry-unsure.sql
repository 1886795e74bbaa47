-- For which records does the space group hang on the tolerance?
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       x.space_group,
       x.space_group_symbol,
       x.lattice_type,
       x.crystal_lattice_type
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.symmetry_unsure
ORDER BY r.source, r.label, r.record_id
