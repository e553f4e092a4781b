-- one row per patient and local calendar day with wear; key patient_code, local_day
-- Every day with wear is a row, also one without analysable time: its burdens are NULL then.
WITH days AS (
    SELECT
        patient_code,
        any_value(patient_zone) AS patient_zone,
        quarter_local::DATE AS local_day,
        sum(recorded_s) / 3600 AS recorded_h,
        sum(worn_s) / 3600 AS worn_h,
        sum(analysable_s) / 3600 AS analysable_h,
        sum(n_beats) AS n_beats,
        sum(s_beats) AS s_beats,
        sum(v_beats) AS v_beats,
        sum(f_beats) AS f_beats,
        sum(q_beats) AS q_beats,
        sum(all_beats) AS all_beats,
        sum(decided_beats) AS decided_beats,
        60 * sum(rr_count) / nullif(sum(rr_sum_s), 0) AS mean_rate_bpm,
        sum(couplets) AS couplets,
        sum(runs) AS runs,
        sum(sv_runs) AS sv_runs,
        sum(pauses) AS pauses,
        max(longest_run_beats) AS longest_run_beats,
        max(fastest_run_bpm) AS fastest_run_bpm,
        max(longest_pause_ms) AS longest_pause_ms,
        sum(bigeminy_s) AS bigeminy_s,
        sum(trigeminy_s) AS trigeminy_s,
        sum(irregular_s) AS irregular_s
    FROM patient_quarters
    GROUP BY patient_code, quarter_local::DATE
    HAVING sum(worn_s) > 0
),

covered AS (
    SELECT patient_code, local_day, count(*) AS clock_hours_covered
    FROM anew.local_hours
    WHERE analysable_s >= 900
    GROUP BY patient_code, local_day
)

SELECT
    days.*,
    calendar.day_h,
    coalesce(covered.clock_hours_covered, 0) AS clock_hours_covered,
    days.analysable_h >= settings.min_analysable_h_per_day AS is_valid_day,
    100 * days.v_beats / nullif(days.all_beats, 0) AS v_burden_pct,
    interval.v_burden_low_pct,
    interval.v_burden_high_pct,
    100 * days.s_beats / nullif(days.all_beats, 0) AS s_burden_pct,
    days.v_beats / nullif(days.analysable_h, 0) AS v_per_h
FROM days
CROSS JOIN programme.settings AS settings
INNER JOIN programme.local_days AS calendar
    ON calendar.zone = days.patient_zone AND calendar.local_day = days.local_day
LEFT JOIN burden_intervals AS interval
    ON interval.patient_code = days.patient_code AND interval.local_day = days.local_day
LEFT JOIN covered ON covered.patient_code = days.patient_code AND covered.local_day = days.local_day
