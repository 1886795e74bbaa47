-- Records of one key have one composition, one number of primitive sites and one periodicity.
SELECT f.crystal_key, min(r.record_id) AS record_id, max(r.record_id) AS other_record_id
FROM canonical_forms f
JOIN records r USING (record_id)
GROUP BY f.crystal_key
HAVING count(DISTINCT r.composition) > 1 OR count(DISTINCT r.sites_primitive) > 1 OR count(DISTINCT r.periodicity) > 1
