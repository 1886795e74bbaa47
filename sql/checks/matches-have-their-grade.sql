-- The grade of a match is the strictest whose limits on shift and strain it keeps, or window.
-- Where mirror images are two crystals, the best match without mirror image counts; there may be none.
WITH limits AS (
    SELECT max(value::DOUBLE) FILTER (name = 'same_shift') AS same_shift,
           max(value::DOUBLE) FILTER (name = 'same_strain') AS same_strain,
           max(value::DOUBLE) FILTER (name = 'near_shift') AS near_shift,
           max(value::DOUBLE) FILTER (name = 'near_strain') AS near_strain,
           max(value::DOUBLE) FILTER (name = 'window_factor') AS factor
    FROM stage_settings WHERE stage = 'verify' AND name <> 'mirror_images'
),
counted AS (
    SELECT m.*, s.value = '"separate"' AS separate,
           if(separate, proper_shift_angstrom, largest_shift_angstrom) AS shift,
           if(separate, proper_strain, m.strain) AS stretch
    FROM matches m
    LEFT JOIN stage_settings s ON s.stage = 'verify' AND s.name = 'mirror_images'
)
SELECT record_a, record_b, grade, shift, stretch AS strain, mirrored
FROM counted, limits
WHERE grade IS DISTINCT FROM CASE
          WHEN shift < least(same_shift, near_shift) + 5e-10 AND stretch < least(same_strain, near_strain) + 5e-10 THEN 'same'
          WHEN shift < near_shift + 5e-10 AND stretch < near_strain + 5e-10 THEN 'near'
          WHEN shift < factor * near_shift + 5e-10 AND stretch < factor * near_strain + 5e-10 THEN 'window'
      END
   OR (grade IS NULL AND NOT (separate AND mirrored))
   OR (mirrored AND NOT improper AND NOT separate)
   OR (NOT improper AND proper_shift_angstrom IS DISTINCT FROM largest_shift_angstrom)
