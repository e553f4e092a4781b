-- Did the ventricular burden change after each therapy event, or could chance explain it?
SELECT
    patient_code, therapy_kind, therapy_day, verdict, change_pct, chance_fall_limit_pct,
    baseline_value, after_value, baseline_days, after_days, baseline_analysable_h, after_analysable_h
FROM changes
INNER JOIN therapies USING (therapy_id, patient_code)
WHERE measure = 'v_burden_pct'
ORDER BY patient_code, therapy_day
