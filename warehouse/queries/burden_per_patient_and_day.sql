-- What is the ventricular burden of each patient on each wear day, and over how many analysable hours?
SELECT patient_code, local_day, v_burden_pct, v_beats, all_beats, analysable_h, day_h
FROM wear_days
ORDER BY patient_code, local_day
