-- one row per recording that an over-reader decided on; key recording_id
-- The latest decision on a beat holds. It meets the nearest beat of the published analysis within 150 ms, so decisions
-- survive a new detector as long as it finds the beat.
WITH latest AS (
    SELECT recording_id, segment, sample, arg_max(decision, (reviewed_utc, delivery_id)) AS decision
    FROM lake.reviews
    GROUP BY recording_id, segment, sample
),

found AS (
    SELECT recording_id, segment, sample, beat_class, is_analysable
    FROM lake.beats
    WHERE recording_id IN (SELECT recording_id FROM latest)
),

candidates AS (
    SELECT latest.*, found.sample AS found_sample, found.beat_class, found.is_analysable
    FROM latest
    ASOF JOIN found
        ON latest.recording_id = found.recording_id AND latest.segment = found.segment AND latest.sample >= found.sample
    UNION ALL
    SELECT latest.*, found.sample AS found_sample, found.beat_class, found.is_analysable
    FROM latest
    ASOF JOIN found
        ON latest.recording_id = found.recording_id AND latest.segment = found.segment AND latest.sample <= found.sample
),

met AS (
    SELECT
        candidates.recording_id,
        candidates.segment,
        candidates.found_sample,
        arg_min(decision, abs(sample - found_sample)) AS decision,
        any_value(beat_class) AS beat_class,
        any_value(is_analysable) AS is_analysable
    FROM candidates
    INNER JOIN recordings USING (recording_id)
    WHERE abs(sample - found_sample) <= round(0.15 * fs_hz)
    GROUP BY candidates.recording_id, candidates.segment, candidates.found_sample
),

moved AS (
    SELECT
        recording_id,
        count(*) AS met_beats,
        count(*) FILTER (WHERE is_analysable) AS decided_beats,
        count(*) FILTER (WHERE is_analysable AND beat_class = 'V') AS decided_v_beats,
        count(*) FILTER (WHERE is_analysable AND decision = 'V' AND beat_class <> 'V') AS gained,
        count(*) FILTER (WHERE is_analysable AND decision <> 'V' AND beat_class = 'V') AS lost,
        count(*) FILTER (WHERE is_analysable AND decision = 'noise') AS noise
    FROM met
    GROUP BY recording_id
),

readers AS (
    SELECT recording_id, string_agg(DISTINCT reader_code, ' ' ORDER BY reader_code) AS reader_codes
    FROM lake.decisions
    GROUP BY recording_id
),

decided AS (
    SELECT recording_id, count(*) AS decisions
    FROM latest
    GROUP BY recording_id
)

SELECT
    recordings.recording_id,
    patient_code,
    reader_codes,
    coalesce(decided_beats, 0) AS decided_beats,
    coalesce(decisions, 0) - coalesce(met_beats, 0) AS unmet_decisions,
    100 * coalesce(decided_v_beats, 0) / nullif(v_beats, 0) AS decided_v_pct,
    v_beats,
    all_beats,
    v_burden_pct,
    v_beats + coalesce(gained - lost, 0) AS reviewed_v_beats,
    all_beats - coalesce(noise, 0) AS reviewed_all_beats,
    100 * (v_beats + coalesce(gained - lost, 0)) / nullif(all_beats - coalesce(noise, 0), 0) AS reviewed_v_burden_pct
FROM readers
INNER JOIN recordings USING (recording_id)
LEFT JOIN decided USING (recording_id)
LEFT JOIN moved USING (recording_id)
