-- Every record has a structure, a canonical form and a row of types for its key, and none of these stands without a record.
SELECT record_id, 'no structure' AS lacks FROM records ANTI JOIN structures USING (record_id)
UNION ALL
SELECT record_id, 'no canonical form' FROM records ANTI JOIN canonical_forms USING (record_id)
UNION ALL
SELECT record_id, 'no row of types for its key' FROM canonical_forms ANTI JOIN crystal_types USING (crystal_key)
UNION ALL
SELECT record_id, 'a structure without a record' FROM structures ANTI JOIN records USING (record_id)
UNION ALL
SELECT record_id, 'a canonical form without a record' FROM canonical_forms ANTI JOIN records USING (record_id)
