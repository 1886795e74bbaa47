-- A refusal has a known reason and a known stage.
SELECT source, file, position, stage, reason
FROM rejects
WHERE reason IS NULL OR NOT list_contains($reasons, reason) OR stage IS NULL OR stage NOT IN ('read', 'parse', 'canonical')
