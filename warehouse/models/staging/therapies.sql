-- one row per therapy event of a registered patient; key therapy_id
SELECT therapy_id, patient_code, therapy_kind, therapy_detail, therapy_day
FROM register.therapies
