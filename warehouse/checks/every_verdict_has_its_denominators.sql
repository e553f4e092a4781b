-- a returned row is a verdict about chance without days and hours on both sides, or beyond chance without its limit
-- Nothing before and nothing after is within chance and has no ratio and no limit.
-- The longest and the fastest run are compared by the ranks of their days and have no limit.
SELECT patient_code, therapy_id, measure, verdict, baseline_days, after_days, ratio, chance_fall_limit_pct
FROM changes
WHERE (
        verdict <> 'too_little_wear'
        AND (
            baseline_days IS NULL OR baseline_days < 1 OR after_days IS NULL OR after_days < 1
            OR baseline_analysable_h IS NULL OR after_analysable_h IS NULL
        )
    )
    OR (
        verdict = 'fell_beyond_chance' AND chance_fall_limit_pct IS NULL
        AND measure NOT IN ('longest_run_beats', 'fastest_run_bpm')
    )
