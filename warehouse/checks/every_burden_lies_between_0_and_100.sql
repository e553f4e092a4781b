-- a returned row is a wear day, hour, period or recording whose burden is below 0 or above 100 %
SELECT 'wear_days' AS table_name, patient_code AS whose, v_burden_pct, s_burden_pct
FROM anew.wear_days
WHERE v_burden_pct NOT BETWEEN 0 AND 100 OR s_burden_pct NOT BETWEEN 0 AND 100
UNION ALL
SELECT 'local_hours', patient_code, v_burden_pct, NULL FROM anew.local_hours WHERE v_burden_pct NOT BETWEEN 0 AND 100
UNION ALL
SELECT 'periods', patient_code, v_burden_pct, s_burden_pct
FROM anew.periods
WHERE v_burden_pct NOT BETWEEN 0 AND 100 OR s_burden_pct NOT BETWEEN 0 AND 100
UNION ALL
SELECT 'recordings', recording_id, v_burden_pct, NULL FROM anew.recordings WHERE v_burden_pct NOT BETWEEN 0 AND 100
