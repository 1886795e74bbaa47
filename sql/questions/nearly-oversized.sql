-- Which primitive cells would be a multiple of a smaller one but for small displacements?
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       r.sites_primitive,
       x.pseudo_index,
       x.pseudo_residual_angstrom
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.pseudo_index > 1
ORDER BY x.pseudo_residual_angstrom, r.record_id
