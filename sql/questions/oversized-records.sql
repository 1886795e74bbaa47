-- Which records came in a cell larger than the primitive one?
-- $source VARCHAR = NULL: only records of this source
-- $least INTEGER = 2: only cells that hold at least so many primitive ones
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       x.supercell_index,
       r.sites_given,
       r.sites_primitive,
       x.residual_angstrom
FROM current_records r
JOIN crystals x USING (record_id)
WHERE x.supercell_index >= $least
  AND ($source::VARCHAR IS NULL OR r.source = $source)
ORDER BY x.supercell_index DESC, r.source, r.label, r.record_id
