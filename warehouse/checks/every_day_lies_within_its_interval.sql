-- a returned row is a day whose burden lies outside its own interval
-- 1e-9 absorbs the rounding of two ways to the same share.
SELECT patient_code, local_day, v_burden_low_pct, v_burden_pct, v_burden_high_pct
FROM anew.wear_days
WHERE v_burden_pct < v_burden_low_pct - 1e-9 OR v_burden_pct > v_burden_high_pct + 1e-9
