-- A withdrawal names one source or one record that the store holds.
SELECT withdrawal_id, source, record_id
FROM withdrawals
WHERE (source IS NULL) = (record_id IS NULL)
   OR source NOT IN (SELECT source FROM sources)
   OR record_id NOT IN (SELECT record_id FROM records)
