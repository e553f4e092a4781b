-- a returned row is a verdict that contradicts the change and the chance limit shown beside it
SELECT patient_code, therapy_id, measure, verdict, change_pct, chance_fall_limit_pct, chance_rise_limit_pct
FROM changes
WHERE (verdict = 'fell_beyond_chance' AND -change_pct < chance_fall_limit_pct - 1e-6)
    OR (verdict = 'rose_beyond_chance' AND change_pct < chance_rise_limit_pct - 1e-6)
