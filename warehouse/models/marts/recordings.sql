-- one row per landed recording that has a wear in the register; key recording_id
-- A recording that was not analysed yet has NULL for everything that analysis gives.
WITH tallies AS (
    SELECT
        recording_id,
        any_value(fingerprint) AS fingerprint,
        sum(worn_s) / 3600 AS worn_h,
        sum(analysable_s) / 3600 AS analysable_h,
        sum(all_beats) AS all_beats,
        sum(v_beats) AS v_beats,
        sum(decided_beats) AS decided_beats
    FROM counted_quarters
    GROUP BY recording_id
)

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
LEFT JOIN tallies ON tallies.recording_id = recording.recording_id
