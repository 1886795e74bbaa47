-- No run is under way in a published store, and no recomputation is half done.
SELECT 'run ' || run_id AS what, command AS value FROM runs WHERE status IS NULL OR status NOT IN ('done', 'interrupted')
UNION ALL
SELECT name, value FROM store_facts WHERE name = 'recomputing'
