-- one row per analysed recording that has a wear in the register; key recording_id
SELECT
    quarter.recording_id,
    any_value(wear.patient_code) AS patient_code,
    any_value(quarter.fingerprint) AS fingerprint,
    sum(quarter.worn_s) / 3600 AS worn_h,
    sum(quarter.analysable_s) / 3600 AS analysable_h,
    sum(quarter.all_beats) AS all_beats,
    sum(quarter.v_beats) AS v_beats,
    sum(quarter.decided_beats) AS decided_beats
FROM counted_quarters AS quarter
INNER JOIN recording_wears AS wear ON wear.recording_id = quarter.recording_id
GROUP BY quarter.recording_id
