-- one row per patient, therapy event and period, also without any wear day; key patient_code, therapy_id, period
WITH days AS (
    SELECT
        span.patient_code,
        span.therapy_id,
        span.period,
        count(*) AS wear_days,
        count_if(day.is_valid_day) AS valid_days,
        sum(day.worn_h ORDER BY day.local_day) AS worn_h,
        sum(day.analysable_h ORDER BY day.local_day) AS analysable_h,
        sum(day.all_beats) AS all_beats,
        sum(day.v_beats) AS v_beats,
        sum(day.s_beats) AS s_beats
    FROM period_spans AS span
    INNER JOIN anew.wear_days AS day
        ON day.patient_code = span.patient_code AND day.local_day BETWEEN span.first_day AND span.last_day
    GROUP BY ALL
),

clock AS (
    SELECT
        span.patient_code,
        span.therapy_id,
        span.period,
        100 * count(DISTINCT quarter.hour_of_day) / 24 AS clock_coverage_pct,
        60 * sum(quarter.rr_count) / nullif(sum(quarter.rr_sum_s), 0) AS mean_rate_bpm
    FROM period_spans AS span
    INNER JOIN (
        SELECT
            patient_code,
            quarter_local::DATE AS local_day,
            hour(quarter_local) AS hour_of_day,
            sum(rr_count) AS rr_count,
            sum(rr_sum_s) AS rr_sum_s
        FROM patient_quarters
        GROUP BY ALL
        HAVING sum(analysable_s) > 0
    ) AS quarter
        ON quarter.patient_code = span.patient_code AND quarter.local_day BETWEEN span.first_day AND span.last_day
    GROUP BY ALL
)

SELECT
    span.patient_code,
    span.therapy_id,
    span.period,
    span.first_day,
    span.last_day,
    coalesce(days.wear_days, 0) AS wear_days,
    coalesce(days.valid_days, 0) AS valid_days,
    coalesce(days.worn_h, 0) AS worn_h,
    coalesce(days.analysable_h, 0) AS analysable_h,
    coalesce(clock.clock_coverage_pct, 0) AS clock_coverage_pct,
    coalesce(days.all_beats, 0) AS all_beats,
    coalesce(days.v_beats, 0) AS v_beats,
    coalesce(days.s_beats, 0) AS s_beats,
    100 * days.v_beats / nullif(days.all_beats, 0) AS v_burden_pct,
    100 * days.s_beats / nullif(days.all_beats, 0) AS s_burden_pct,
    days.v_beats / nullif(days.analysable_h, 0) AS v_per_h,
    clock.mean_rate_bpm
FROM period_spans AS span
LEFT JOIN days USING (patient_code, therapy_id, period)
LEFT JOIN clock USING (patient_code, therapy_id, period)
