-- At which hours of the day does each patient have most ventricular beats?
SELECT
    patient_code,
    clock_hour,
    100 * sum(v_beats) / nullif(sum(all_beats), 0) AS v_burden_pct,
    sum(analysable_s) / 3600 AS analysable_h
FROM local_hours
GROUP BY patient_code, clock_hour
ORDER BY patient_code, v_burden_pct DESC NULLS LAST
