-- one row per patient and reason for a look; key patient_code, attention_code
WITH reasons AS (
    SELECT * FROM attention_from_days
    UNION ALL
    SELECT * FROM attention_from_therapies
),

urgency AS (
    SELECT attention_code, place
    FROM (VALUES
        ('fast_run', 1), ('long_pause', 2), ('rose_beyond_chance', 3), ('recurrence', 4), ('ventricular_run', 5),
        ('burden_over_line', 6), ('follow_up_missing', 7), ('too_little_wear', 8)
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
