-- Which lattices lie nearest to a lattice of a higher type?
-- $within DOUBLE = 0.02: largest logarithmic strain
-- $lattice_type VARCHAR = NULL: only lattices of this type
SELECT r.record_id,
       r.source,
       r.label,
       r.formula,
       l.lattice_type,
       regexp_replace(l.step, '^.*strain_to_', '') AS higher_type,
       l.strain
FROM (
    UNPIVOT (SELECT record_id, lattice_type, COLUMNS('^(plane_)?strain_to_') FROM crystals)
    ON COLUMNS('^(plane_)?strain_to_')
    INTO NAME step VALUE strain
) AS l
JOIN current_records r USING (record_id)
WHERE l.strain <= $within
  AND ($lattice_type::VARCHAR IS NULL OR l.lattice_type = $lattice_type)
QUALIFY row_number() OVER (PARTITION BY r.record_id ORDER BY l.strain, higher_type) = 1
ORDER BY l.strain, r.record_id
