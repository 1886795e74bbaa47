-- Which lattice types do the records take that hold an element?
-- $element VARCHAR = NULL: only this element
SELECT e.element,
       x.lattice_type,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals
FROM current_records r
JOIN crystals x USING (record_id)
CROSS JOIN unnest(r.elements) AS e(element)
WHERE $element::VARCHAR IS NULL OR e.element = $element
GROUP BY e.element, x.lattice_type
ORDER BY e.element, records DESC, x.lattice_type
