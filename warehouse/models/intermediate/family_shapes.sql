-- one row per shape family with enough beats for a shape that can be followed; key recording_id, family
SELECT
    family.recording_id,
    wear.patient_code,
    recording.start_utc,
    family.family,
    family.family_class,
    family.beat_count,
    family.shape_mv
FROM lake.families AS family
INNER JOIN lake.recordings AS recording USING (recording_id)
INNER JOIN recording_wears AS wear USING (recording_id)
WHERE family.beat_count >= 10
