-- one row per beat of the published analysis that a decision of an over-reader meets; key recording_id, segment, sample
-- A decision meets the nearest beat within 150 ms, so decisions survive a new detector as long as it finds the beat.
-- The latest decision of each reader holds; where readers differ, the beat keeps its automatic class.
WITH latest AS (
    SELECT recording_id, segment, sample, reader_code, arg_max(decision, (reviewed_utc, delivery_id)) AS decision
    FROM lake.reviews
    GROUP BY recording_id, segment, sample, reader_code
),

found AS (
    SELECT recording_id, segment, sample AS found_sample, beat_utc, beat_class, is_analysable
    FROM lake.beats
    WHERE recording_id IN (SELECT recording_id FROM latest)
),

neighbours AS (
    SELECT latest.*, found.* EXCLUDE (recording_id, segment)
    FROM latest
    ASOF JOIN found
        ON latest.recording_id = found.recording_id AND latest.segment = found.segment
        AND latest.sample >= found.found_sample
    UNION ALL
    SELECT latest.*, found.* EXCLUDE (recording_id, segment)
    FROM latest
    ASOF JOIN found
        ON latest.recording_id = found.recording_id AND latest.segment = found.segment
        AND latest.sample <= found.found_sample
),

of_reader AS (
    SELECT
        recording_id,
        segment,
        found_sample,
        reader_code,
        arg_min(decision, abs(sample - found_sample)) AS decision,
        any_value(beat_utc) AS beat_utc,
        any_value(beat_class) AS beat_class,
        any_value(is_analysable) AS is_analysable
    FROM neighbours
    INNER JOIN lake.recordings USING (recording_id)
    WHERE abs(sample - found_sample) <= round(0.15 * fs_hz)
    GROUP BY recording_id, segment, found_sample, reader_code
)

SELECT
    recording_id,
    segment,
    found_sample AS sample,
    any_value(beat_utc) AS beat_utc,
    any_value(beat_class) AS beat_class,
    any_value(is_analysable) AS is_analysable,
    CASE count(DISTINCT decision) WHEN 1 THEN any_value(decision) ELSE any_value(beat_class) END AS decision
FROM of_reader
GROUP BY recording_id, segment, found_sample
