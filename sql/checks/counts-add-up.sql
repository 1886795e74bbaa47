-- Found records are the accepted and the refused ones, file by file and chunk by chunk.
SELECT source, file AS part, found, accepted, rejected
FROM files
WHERE found IS DISTINCT FROM accepted + rejected
UNION ALL
SELECT source, 'chunk ' || chunk, found, accepted, rejected
FROM chunks
WHERE found IS DISTINCT FROM accepted + rejected OR accepted IS DISTINCT FROM new_records + amended + replaced + unchanged
