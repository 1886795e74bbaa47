-- The table `seen` is empty between runs.
SELECT source, file, record_id FROM seen
