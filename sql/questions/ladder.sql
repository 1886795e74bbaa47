-- How many lattices of each type lie within a small strain of a higher type?
-- $within DOUBLE = 0.02: largest logarithmic strain
SELECT l.lattice_type,
       regexp_replace(l.step, '^.*strain_to_', '') AS higher_type,
       count(*) AS records,
       count(DISTINCT l.crystal_key) AS crystals,
       min(l.strain) AS least_strain,
       median(l.strain) AS median_strain
FROM (
    UNPIVOT (
        SELECT x.crystal_key, x.lattice_type, COLUMNS('^(plane_)?strain_to_')
        FROM current_records r
        JOIN crystals x USING (record_id)
    )
    ON COLUMNS('^(plane_)?strain_to_')
    INTO NAME step VALUE strain
) AS l
WHERE l.strain <= $within
GROUP BY l.lattice_type, higher_type
ORDER BY l.lattice_type, least_strain, higher_type
