-- one row per shape family that an over-reader split and of which something is undecided; key recording_id, family
-- Its beats count as found automatically until their part of the family is decided or they are relabelled one by one.
-- Family numbers hold within the analysis that was read only. The latest word of each reader on the family holds.
WITH latest AS (
    SELECT recording_id, family, reader_code, arg_max(is_mixed, (reviewed_utc, delivery_id)) AS is_mixed
    FROM lake.decisions
    CROSS JOIN programme.settings AS settings
    WHERE decision_subject = 'family' AND read_fingerprint = settings.fingerprint
    GROUP BY recording_id, family, reader_code
),

mixed AS (
    SELECT recording_id, family, string_agg(reader_code, ' ' ORDER BY reader_code) AS reader_codes
    FROM latest
    WHERE is_mixed
    GROUP BY recording_id, family
),

-- Accepted normal beats are no rows of the reviews.
parts AS (
    SELECT recording_id, family, part_class
    FROM latest_decisions
    CROSS JOIN programme.settings AS settings
    WHERE decision_subject = 'part' AND read_fingerprint = settings.fingerprint
)

SELECT
    mixed.recording_id,
    recordings.patient_code,
    mixed.family,
    mixed.reader_codes,
    count(*) FILTER (WHERE beat.beat_class = 'V') AS undecided_v_beats,
    count(*) FILTER (WHERE beat.beat_class <> 'V') AS undecided_other_beats
FROM mixed
INNER JOIN anew.recordings AS recordings USING (recording_id)
INNER JOIN lake.beats AS beat
    ON beat.recording_id = mixed.recording_id AND beat.family = mixed.family AND beat.is_analysable
ANTI JOIN decided_beats AS decided
    ON decided.recording_id = beat.recording_id AND decided.segment = beat.segment AND decided.sample = beat.sample
ANTI JOIN parts
    ON parts.recording_id = beat.recording_id AND parts.family = beat.family AND parts.part_class = beat.beat_class
GROUP BY mixed.recording_id, recordings.patient_code, mixed.family, mixed.reader_codes
