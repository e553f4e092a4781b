-- one row per patient and reason for a look that the latest therapy event gives; key patient_code, attention_code
-- "Now" is the latest day with wear in the whole programme, so the list follows from the data and not from a clock.
WITH latest AS (
    SELECT
        therapy.patient_code,
        therapy.therapy_id,
        therapy.therapy_day,
        after.first_day,
        after.wear_days,
        change.verdict,
        change.change_pct,
        change.chance_rise_limit_pct,
        change.recurrence_day,
        change.reason
    FROM therapies AS therapy
    INNER JOIN periods AS after ON after.therapy_id = therapy.therapy_id AND after.period = 'after'
    LEFT JOIN changes AS change ON change.therapy_id = therapy.therapy_id AND change.measure = 'v_burden_pct'
    QUALIFY row_number() OVER (
        PARTITION BY therapy.patient_code ORDER BY therapy.therapy_day DESC, therapy.therapy_id
    ) = 1
),

now AS (SELECT max(local_day) AS latest_day FROM wear_days)

SELECT
    patient_code,
    'rose_beyond_chance' AS attention_code,
    change_pct AS weight,
    first_day AS since_day,
    printf('ventricular burden rose by %.0f %% after the therapy event of %s; chance explains up to %.0f %%',
        change_pct, therapy_day::VARCHAR, chance_rise_limit_pct) AS attention_reason
FROM latest
WHERE verdict = 'rose_beyond_chance'
UNION ALL
SELECT
    patient_code,
    'recurrence',
    date_diff('day', therapy_day, recurrence_day),
    recurrence_day,
    printf('ventricular burden had fallen after the therapy event of %s and is back beyond chance since %s',
        therapy_day::VARCHAR, recurrence_day::VARCHAR)
FROM latest
WHERE recurrence_day IS NOT NULL
UNION ALL
SELECT
    patient_code,
    'follow_up_missing',
    date_diff('day', first_day, now.latest_day),
    first_day,
    printf('no wear since the settling time after the therapy event of %s ended', therapy_day::VARCHAR)
FROM latest, now
WHERE wear_days = 0 AND first_day <= now.latest_day
UNION ALL
SELECT
    patient_code,
    'too_little_wear',
    date_diff('day', therapy_day, now.latest_day),
    therapy_day,
    printf('too little wear to judge the therapy event of %s', therapy_day::VARCHAR) || coalesce(': ' || reason, '')
FROM latest, now
WHERE verdict = 'too_little_wear' AND wear_days > 0
