-- one row per therapy event of a patient built anew and period, with its first and last local day; key therapy_id, period
-- Baseline ends the day before the event and begins after the settling time of the event before it; the after period
-- ends the day before the next event. A span without days has NULL for both. Events of one day share their spans.
WITH events AS (
    SELECT
        therapy_id,
        patient_code,
        therapy_day,
        therapy_day + max(settling_days) OVER same_day AS settled_day
    FROM register.therapies
    ANTI JOIN kept.patients USING (patient_code)
    WINDOW same_day AS (PARTITION BY patient_code, therapy_day)
),

neighbours AS (
    SELECT
        *,
        max(settled_day) OVER (
            PARTITION BY patient_code ORDER BY therapy_day
            RANGE BETWEEN UNBOUNDED PRECEDING AND INTERVAL 1 DAY PRECEDING
        ) AS earlier_settled_day,
        min(therapy_day) OVER (
            PARTITION BY patient_code ORDER BY therapy_day
            RANGE BETWEEN INTERVAL 1 DAY FOLLOWING AND UNBOUNDED FOLLOWING
        ) AS next_therapy_day
    FROM events
),

spans AS (
    SELECT
        therapy_id,
        patient_code,
        unnest(['baseline', 'settling', 'after']) AS period,
        unnest([
            greatest(therapy_day - settings.baseline_days, earlier_settled_day), therapy_day, settled_day
        ]) AS first_day,
        unnest([
            therapy_day - 1,
            least(settled_day, next_therapy_day) - 1,
            least(settled_day + settings.after_days, next_therapy_day) - 1
        ]) AS last_day
    FROM neighbours
    CROSS JOIN programme.settings AS settings
)

SELECT
    therapy_id,
    patient_code,
    period,
    if(first_day <= last_day, first_day, NULL)::DATE AS first_day,
    if(first_day <= last_day, last_day, NULL)::DATE AS last_day
FROM spans
