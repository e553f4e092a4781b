-- one row per patient and reason for a look that wear days give; key patient_code, attention_code
-- `weight` orders patients with the same reason; the thresholds are the programme's reference lines, never verdicts.
WITH latest AS (
    SELECT patient_code, max(local_day) AS latest_day
    FROM wear_days
    WHERE is_valid_day
    GROUP BY patient_code
),

under_line AS (
    SELECT patient_code, max(local_day) AS last_day_under
    FROM wear_days, programme.settings AS settings
    WHERE is_valid_day AND v_burden_pct < settings.attention_v_burden_pct
    GROUP BY patient_code
),

over_line AS (
    SELECT
        day.patient_code,
        arg_max(day.v_burden_pct, day.local_day) AS weight,
        arg_max(day.analysable_h, day.local_day) AS latest_h,
        min(day.local_day) AS since_day,
        max(day.local_day) AS latest_day
    FROM wear_days AS day
    INNER JOIN latest USING (patient_code)
    LEFT JOIN under_line USING (patient_code)
    WHERE day.is_valid_day AND day.v_burden_pct IS NOT NULL
        AND (under_line.last_day_under IS NULL OR day.local_day > under_line.last_day_under)
    GROUP BY day.patient_code
)

SELECT
    patient_code,
    'burden_over_line' AS attention_code,
    weight,
    since_day,
    printf('%.1f %% ventricular beats over %.1f analysable hours on %s, the latest valid day; the line is %g %%',
        weight, latest_h, latest_day::VARCHAR, settings.attention_v_burden_pct) AS attention_reason
FROM over_line, programme.settings AS settings
UNION ALL
SELECT
    patient_code,
    'ventricular_run',
    max(longest_run_beats),
    min(local_day),
    printf('longest ventricular run %d beats; runs of %d or more on %d of the days since %s',
        max(longest_run_beats), any_value(settings.attention_run_beats), count(*), min(local_day)::VARCHAR)
FROM wear_days, programme.settings AS settings
WHERE longest_run_beats >= settings.attention_run_beats
GROUP BY patient_code
UNION ALL
SELECT
    patient_code,
    'fast_run',
    max(fastest_run_bpm),
    min(local_day),
    printf('fastest ventricular run %.0f/min, on %s; the line is %g/min',
        max(fastest_run_bpm), arg_min(local_day, row(-fastest_run_bpm, local_day))::VARCHAR, any_value(settings.attention_fast_run_bpm))
FROM wear_days, programme.settings AS settings
WHERE fastest_run_bpm >= settings.attention_fast_run_bpm
GROUP BY patient_code
UNION ALL
SELECT
    patient_code,
    'long_pause',
    max(longest_pause_ms),
    min(local_day),
    printf('longest pause %.0f ms, on %s; the line is %g ms',
        max(longest_pause_ms), arg_min(local_day, row(-longest_pause_ms, local_day))::VARCHAR, any_value(settings.attention_pause_ms))
FROM wear_days, programme.settings AS settings
WHERE longest_pause_ms >= settings.attention_pause_ms
GROUP BY patient_code
