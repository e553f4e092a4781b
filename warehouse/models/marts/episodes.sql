-- one row per episode of a recording that has a wear in the register; key recording_id, episode_kind, segment, first_sample
SELECT row.*
FROM lake.episodes AS row
INNER JOIN recording_wears USING (recording_id)
