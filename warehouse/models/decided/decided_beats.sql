-- one row per beat of the published analysis that a decision of an over-reader meets; key recording_id, segment, sample
-- Where readers differ, the beat keeps its automatic class. Accepted normal beats are no rows of the reviews: who accepted
-- them in a family of which another reader relabels beats counts as a reader who calls them normal.
WITH of_reader AS (
    SELECT
        recording_id,
        segment,
        sample,
        reader_code,
        arg_min(decision, apart_us) AS decision,
        any_value(beat_utc) AS beat_utc,
        any_value(beat_class) AS beat_class,
        any_value(family) AS family,
        any_value(is_analysable) AS is_analysable
    FROM met_reviews
    GROUP BY recording_id, segment, sample, reader_code
    HAVING arg_min(decision, apart_us) <> 'withdraw'
),

accepted AS (
    SELECT DISTINCT recording_id, family, reader_code
    FROM latest_decisions
    CROSS JOIN programme.settings AS settings
    WHERE
        decision = 'accept' AND read_fingerprint = settings.fingerprint
        AND (decision_subject = 'family' OR part_class = 'N')
),

of_accepting AS (
    SELECT DISTINCT beat.* REPLACE (accepted.reader_code AS reader_code, 'N' AS decision)
    FROM of_reader AS beat
    INNER JOIN accepted USING (recording_id, family)
    WHERE beat.beat_class = 'N'
),

said AS (
    FROM of_reader
    UNION ALL BY NAME
    SELECT of_accepting.*
    FROM of_accepting
    ANTI JOIN of_reader USING (recording_id, segment, sample, reader_code)
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
FROM said
GROUP BY recording_id, segment, sample
