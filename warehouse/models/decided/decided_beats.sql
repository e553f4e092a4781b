-- one row per beat of the published analysis that a decision of an over-reader meets; key recording_id, segment, sample
-- A decision meets the nearest beat within 150 ms of its instant, so decisions survive a new detector, as long as it
-- finds the beat, and parts that arrive late and renumber segments and samples.
-- The latest decision of each reader holds; where readers differ, the beat keeps its automatic class.
WITH latest AS (
    SELECT recording_id, beat_utc AS decided_utc, reader_code, arg_max(decision, (reviewed_utc, delivery_id)) AS decision
    FROM lake.reviews
    ANTI JOIN kept.wears USING (recording_id)
    GROUP BY recording_id, beat_utc, reader_code
),

found AS (
    SELECT recording_id, segment, sample, beat_utc, beat_class, family, is_analysable
    FROM lake.beats
    WHERE recording_id IN (SELECT recording_id FROM latest)
),

neighbours AS (
    SELECT latest.*, found.* EXCLUDE (recording_id)
    FROM latest
    ASOF JOIN found ON latest.recording_id = found.recording_id AND latest.decided_utc >= found.beat_utc
    UNION ALL
    SELECT latest.*, found.* EXCLUDE (recording_id)
    FROM latest
    ASOF JOIN found ON latest.recording_id = found.recording_id AND latest.decided_utc <= found.beat_utc
),

of_reader AS (
    SELECT
        recording_id,
        segment,
        sample,
        reader_code,
        arg_min(decision, abs(epoch_us(decided_utc) - epoch_us(beat_utc))) AS decision,
        any_value(beat_utc) AS beat_utc,
        any_value(beat_class) AS beat_class,
        any_value(family) AS family,
        any_value(is_analysable) AS is_analysable
    FROM neighbours
    WHERE abs(epoch_us(decided_utc) - epoch_us(beat_utc)) <= 150000
    GROUP BY recording_id, segment, sample, reader_code
)

SELECT
    recording_id,
    segment,
    sample,
    any_value(beat_utc) AS beat_utc,
    any_value(beat_class) AS beat_class,
    any_value(family) AS family,
    any_value(is_analysable) AS is_analysable,
    CASE count(DISTINCT decision) WHEN 1 THEN any_value(decision) ELSE any_value(beat_class) END AS decision
FROM of_reader
GROUP BY recording_id, segment, sample
