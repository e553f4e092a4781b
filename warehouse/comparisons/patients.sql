-- one row per patient with wear under either fingerprint; key patient_code
-- "a" is the first build, "b" the second; changed_days are days whose burden differs by more than 0.1 points.
WITH days AS (
    SELECT
        coalesce(a.patient_code, b.patient_code) AS patient_code,
        a.analysable_h AS analysable_h_a,
        b.analysable_h AS analysable_h_b,
        a.v_beats AS v_beats_a,
        b.v_beats AS v_beats_b,
        a.all_beats AS all_beats_a,
        b.all_beats AS all_beats_b,
        abs(coalesce(b.v_burden_pct, 0) - coalesce(a.v_burden_pct, 0)) AS burden_moved
    FROM days_a AS a
    FULL JOIN days_b AS b ON a.patient_code = b.patient_code AND a.local_day = b.local_day
)

SELECT
    patient_code,
    count(*) AS wear_days,
    count_if(burden_moved > 0.1) AS changed_days,
    max(burden_moved) AS largest_move_points,
    coalesce(sum(analysable_h_a), 0) AS analysable_h_a,
    coalesce(sum(analysable_h_b), 0) AS analysable_h_b,
    coalesce(sum(all_beats_a), 0)::BIGINT AS all_beats_a,
    coalesce(sum(all_beats_b), 0)::BIGINT AS all_beats_b,
    100 * sum(v_beats_a) / nullif(sum(all_beats_a), 0) AS v_burden_pct_a,
    100 * sum(v_beats_b) / nullif(sum(all_beats_b), 0) AS v_burden_pct_b
FROM days
GROUP BY patient_code
ORDER BY largest_move_points DESC, patient_code
