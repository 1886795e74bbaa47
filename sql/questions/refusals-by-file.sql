-- In which files were records refused?
SELECT f.source,
       f.file,
       f.found,
       f.accepted,
       f.rejected,
       100.0 * f.rejected / nullif(f.found, 0) AS refused_percent
FROM files f
WHERE f.rejected > 0 AND f.missing_since_run IS NULL
ORDER BY f.rejected DESC, f.source, f.file
