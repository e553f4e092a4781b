-- one row per finding of the detector of a recording that has a wear in the register; key recording_id, finding_code
SELECT row.*
FROM lake.findings AS row
INNER JOIN recording_wears USING (recording_id)
