-- one row per shape family of a recording that has a wear in the register; key recording_id, family
SELECT row.*
FROM lake.families AS row
INNER JOIN recording_wears USING (recording_id)
