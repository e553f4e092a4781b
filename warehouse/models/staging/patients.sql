-- one row per patient of the register; key patient_code
SELECT patient_code, zone
FROM register.patients
