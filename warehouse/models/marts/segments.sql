-- one row per gap-free stretch of a recording that has a wear in the register; key recording_id, segment
SELECT row.*
FROM lake.segments AS row
INNER JOIN recording_wears USING (recording_id)
