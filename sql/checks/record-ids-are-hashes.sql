-- A record id is the first 20 hex digits of the SHA-256 of source, file and label joined by NUL.
SELECT record_id, source, file, label
FROM records
WHERE record_id IS DISTINCT FROM left(sha256(source || chr(0) || file || chr(0) || label), 20)
