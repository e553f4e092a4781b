-- one row per landed recording that has a wear in the register; key recording_id
SELECT
    recording.recording_id,
    wear.patient_code,
    patient.zone AS patient_zone
FROM lake.recordings AS recording
INNER JOIN register.wears AS wear ON wear.recording_id = recording.recording_id
INNER JOIN register.patients AS patient ON patient.patient_code = wear.patient_code
