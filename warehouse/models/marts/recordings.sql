-- one row per landed recording that has a wear in the register; key recording_id
-- A recording that was not analysed yet has NULL for everything that analysis gives.
SELECT
    recording.*,
    wear.patient_code,
    tallies.worn_h,
    tallies.analysable_h,
    tallies.all_beats,
    tallies.v_beats,
    100 * tallies.v_beats / nullif(tallies.all_beats, 0) AS v_burden_pct,
    tallies.decided_beats,
    tallies.fingerprint
FROM lake.recordings AS recording
INNER JOIN recording_wears AS wear ON wear.recording_id = recording.recording_id
LEFT JOIN recording_tallies AS tallies ON tallies.recording_id = recording.recording_id
