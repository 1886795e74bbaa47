-- Which records did a run bring, amend, replace, or find gone?
-- $run INTEGER = NULL: number of the run; the last that read input where none is given
WITH wanted AS (
    SELECT coalesce($run::BIGINT, (SELECT max(run_id) FROM runs WHERE command IN ('ingest', 'run', 'demo'))) AS run
),
changed AS (
    SELECT r.record_id, 'new' AS change FROM records r, wanted w WHERE r.first_run = w.run
    UNION ALL
    SELECT v.record_id, v.change FROM record_versions v, wanted w WHERE v.ended_by_run = w.run
    UNION ALL
    SELECT r.record_id, 'missing' FROM records r, wanted w WHERE r.missing_since_run = w.run
)
SELECT c.change, r.record_id, r.source, r.label, r.file, r.formula
FROM changed c
JOIN records r USING (record_id)
ORDER BY list_position(['new', 'amended', 'replaced', 'missing'], c.change), r.source, r.file, r.position, r.record_id
