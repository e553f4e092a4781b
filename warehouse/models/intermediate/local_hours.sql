-- one row per patient, local day and clock hour with wear; key patient_code, local_day, clock_hour
-- A clock hour that comes twice when clocks go back is one row of up to two hours.
SELECT
    patient_code,
    quarter_local::DATE AS local_day,
    hour(quarter_local) AS clock_hour,
    sum(worn_s) AS worn_s,
    sum(analysable_s) AS analysable_s,
    sum(n_beats) AS n_beats,
    sum(s_beats) AS s_beats,
    sum(v_beats) AS v_beats,
    sum(f_beats) AS f_beats,
    sum(q_beats) AS q_beats,
    sum(all_beats) AS all_beats,
    60 * sum(rr_count) / nullif(sum(rr_sum_s), 0) AS mean_rate_bpm,
    sum(couplets) AS couplets,
    sum(runs) AS runs,
    max(longest_run_beats) AS longest_run_beats,
    max(fastest_run_bpm) AS fastest_run_bpm,
    sum(bigeminy_s) AS bigeminy_s,
    100 * sum(v_beats) / nullif(sum(all_beats), 0) AS v_burden_pct,
    3600 * sum(v_beats) / nullif(sum(analysable_s), 0) AS v_per_h
FROM patient_quarters
GROUP BY ALL
HAVING sum(worn_s) > 0
