-- one row per patient and reason for a look; key patient_code, attention_code
WITH reasons AS (
    SELECT * FROM attention_from_days
    UNION ALL
    SELECT * FROM attention_from_therapies
    UNION ALL
    SELECT * FROM attention_from_recordings
),

urgency AS (
    SELECT attention_code, place
    FROM (VALUES
        ('sustained_run', 1), ('fast_run', 2), ('long_pause', 3), ('rose_beyond_chance', 4), ('recurrence', 5),
        ('short_coupling', 6), ('ventricular_run', 7), ('burden_over_line', 8), ('patch_about_to_end', 9),
        ('follow_up_missing', 10), ('too_little_wear', 11)
    ) AS listed (attention_code, place)
)

SELECT
    row_number() OVER (ORDER BY urgency.place, reasons.weight DESC, reasons.patient_code) AS attention_rank,
    reasons.patient_code,
    reasons.attention_code,
    reasons.attention_reason,
    reasons.since_day
FROM reasons
INNER JOIN urgency USING (attention_code)
