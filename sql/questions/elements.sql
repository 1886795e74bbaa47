-- How many records and distinct crystals hold each element?
SELECT e.element,
       count(*) AS records,
       count(DISTINCT x.crystal_key) AS crystals,
       count(DISTINCT r.formula) AS formulas,
       count(DISTINCT r.source) AS sources
FROM current_records r
JOIN crystals x USING (record_id)
CROSS JOIN unnest(r.elements) AS e(element)
GROUP BY e.element
ORDER BY records DESC, e.element
