-- a returned row is a verdict about chance without days, hours, a ratio or a chance limit behind it
SELECT patient_code, therapy_id, measure, verdict, baseline_days, after_days, ratio, chance_fall_limit_pct
FROM changes
WHERE verdict <> 'too_little_wear'
    AND (
        baseline_days IS NULL OR baseline_days < 1 OR after_days IS NULL OR after_days < 1
        OR baseline_analysable_h IS NULL OR after_analysable_h IS NULL OR chance_fall_limit_pct IS NULL
    )
