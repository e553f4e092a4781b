-- one row per recording and UTC hour; key recording_id, hour_utc
SELECT
    quarter.recording_id,
    any_value(wear.patient_code) AS patient_code,
    date_trunc('hour', quarter.quarter_utc) AS hour_utc,
    sum(quarter.recorded_s) AS recorded_s,
    sum(quarter.worn_s) AS worn_s,
    sum(quarter.analysable_s) AS analysable_s,
    sum(quarter.n_beats) AS n_beats,
    sum(quarter.s_beats) AS s_beats,
    sum(quarter.v_beats) AS v_beats,
    sum(quarter.f_beats) AS f_beats,
    sum(quarter.q_beats) AS q_beats,
    sum(quarter.all_beats) AS all_beats,
    60 * sum(quarter.rr_count) / nullif(sum(quarter.rr_sum_s), 0) AS mean_rate_bpm,
    sum(quarter.couplets) AS couplets,
    sum(quarter.runs) AS runs,
    sum(quarter.sv_runs) AS sv_runs,
    sum(quarter.pauses) AS pauses,
    max(quarter.longest_run_beats) AS longest_run_beats,
    max(quarter.fastest_run_bpm) AS fastest_run_bpm,
    max(quarter.longest_pause_ms) AS longest_pause_ms,
    sum(quarter.bigeminy_s) AS bigeminy_s,
    sum(quarter.trigeminy_s) AS trigeminy_s,
    sum(quarter.irregular_s) AS irregular_s
FROM counted_quarters AS quarter
INNER JOIN recording_wears AS wear ON wear.recording_id = quarter.recording_id
GROUP BY quarter.recording_id, date_trunc('hour', quarter.quarter_utc)
