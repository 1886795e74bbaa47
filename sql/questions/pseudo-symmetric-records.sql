-- Which records have a lattice of more symmetry than their crystal?
-- $source VARCHAR = NULL: only records of this source
-- $formula FORMULA = NULL: only records of this formula
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       x.lattice_type,
       x.crystal_lattice_type,
       x.space_group_symbol
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.pseudo_symmetric
  AND ($source::VARCHAR IS NULL OR r.source = $source)
  AND ($formula::VARCHAR IS NULL OR r.formula = $formula)
ORDER BY x.lattice_type, x.crystal_lattice_type, r.source, r.label, r.record_id
