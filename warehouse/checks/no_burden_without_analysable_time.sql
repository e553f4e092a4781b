-- a returned row is a wear day with a burden or counted beats but no analysable time
SELECT patient_code, local_day, analysable_h, all_beats, v_burden_pct
FROM anew.wear_days
WHERE analysable_h = 0 AND (all_beats > 0 OR v_burden_pct IS NOT NULL)
