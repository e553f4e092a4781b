-- How fixed is the coupling interval of each patient's ventricular families?
SELECT
    recordings.patient_code, recordings.recording_id, families.family, families.beat_count,
    families.mean_coupling_ms, families.coupling_spread_ms
FROM families
INNER JOIN recordings USING (recording_id)
WHERE family_class = 'V'
ORDER BY patient_code, recording_id, families.beat_count DESC
