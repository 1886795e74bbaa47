-- Which settings were the stored rows computed with?
SELECT stage, name, value
FROM stage_settings
ORDER BY list_position(['parse', 'canonical', 'fingerprint', 'verify', 'keep'], stage), name
