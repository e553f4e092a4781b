-- one row per recording that an over-reader decided on; key recording_id
WITH readers AS (
    SELECT recording_id, string_agg(DISTINCT reader_code, ' ' ORDER BY reader_code) AS reader_codes
    FROM lake.decisions
    GROUP BY recording_id
),

automatic AS (
    SELECT
        recording_id,
        sum(v_beats) AS automatic_v_beats,
        sum(all_beats) AS automatic_all_beats,
        sum(couplets) AS automatic_couplets,
        sum(runs) AS automatic_runs
    FROM lake.quarter_hours
    GROUP BY recording_id
),

counted AS (
    SELECT recording_id, sum(couplets) AS couplets, sum(runs) AS runs
    FROM reviewed.quarter_hours
    GROUP BY recording_id
),

unmet AS (
    SELECT recording_id, count(*) AS decisions
    FROM anew.unmet_decisions
    GROUP BY recording_id
),

met AS (
    SELECT recording_id, count(*) FILTER (WHERE is_analysable AND beat_class = 'V') AS v_beats
    FROM decided_beats
    GROUP BY recording_id
),

rejected AS (
    SELECT recording_id, count(*) AS episodes
    FROM reviewed.episodes
    WHERE NOT is_counted
    GROUP BY recording_id
),

undecided AS (
    SELECT
        recording_id,
        count(*) AS undecided_families,
        sum(undecided_v_beats) AS v_beats,
        sum(undecided_other_beats) AS other_beats
    FROM anew.undecided_families
    GROUP BY recording_id
)

SELECT
    recordings.recording_id,
    patient_code,
    reader_codes,
    decided_beats,
    coalesce(unmet.decisions, 0) AS unmet_decisions,
    coalesce(rejected.episodes, 0) AS rejected_episodes,
    100 * coalesce(met.v_beats, 0) / nullif(automatic_v_beats, 0) AS decided_v_pct,
    automatic_v_beats,
    automatic_all_beats,
    100 * automatic_v_beats / nullif(automatic_all_beats, 0) AS automatic_v_burden_pct,
    recordings.v_beats,
    all_beats,
    v_burden_pct,
    automatic_couplets,
    couplets,
    automatic_runs,
    runs,
    coalesce(undecided_families, 0) AS undecided_families,
    100 * (recordings.v_beats - undecided.v_beats) / nullif(all_beats, 0) AS v_burden_least_pct,
    100 * (recordings.v_beats + undecided.other_beats) / nullif(all_beats, 0) AS v_burden_most_pct
FROM readers
INNER JOIN anew.recordings AS recordings USING (recording_id)
LEFT JOIN automatic USING (recording_id)
LEFT JOIN counted USING (recording_id)
LEFT JOIN unmet USING (recording_id)
LEFT JOIN met USING (recording_id)
LEFT JOIN rejected USING (recording_id)
LEFT JOIN undecided USING (recording_id)
