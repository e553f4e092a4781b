-- a returned row is a wear day with more worn hours than the local calendar day has
SELECT patient_code, local_day, day_h, worn_h
FROM anew.wear_days
WHERE worn_h > day_h + 0.01
