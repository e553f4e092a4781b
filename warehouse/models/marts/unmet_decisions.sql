-- one row per reader and decided beat or episode that the published analysis does not have
-- key recording_id, reader_code, decision_subject, start_utc, episode_kind
-- It counts for nothing and stays on record; a later analysis that has it again takes it up.
WITH beats AS (
    SELECT 'beat' AS decision_subject, NULL::VARCHAR AS episode_kind, decided_utc AS start_utc, latest.* EXCLUDE (decided_utc)
    FROM latest_reviews AS latest
    ANTI JOIN met_reviews USING (recording_id, decided_utc, reader_code)
),

episodes AS (
    SELECT
        'episode' AS decision_subject,
        episode_kind,
        start_utc,
        recording_id,
        reader_code,
        arg_max(decision, (reviewed_utc, delivery_id)) AS decision,
        arg_max(delivery_id, (reviewed_utc, delivery_id)) AS delivery_id,
        max(reviewed_utc) AS reviewed_utc
    FROM lake.decisions
    WHERE decision_subject = 'episode'
    GROUP BY episode_kind, start_utc, recording_id, reader_code
),

unmet AS (
    FROM beats
    UNION ALL BY NAME
    SELECT episodes.*
    FROM episodes
    ANTI JOIN reviewed.episodes AS found
        ON found.recording_id = episodes.recording_id AND found.episode_kind = episodes.episode_kind
        AND found.start_utc BETWEEN
        episodes.start_utc - INTERVAL 150 MILLISECONDS AND episodes.start_utc + INTERVAL 150 MILLISECONDS
)

SELECT
    unmet.*,
    recordings.patient_code,
    CASE
        WHEN segments.recording_id IS NULL THEN 'The recording has no signal at this time any more.'
        WHEN decision_subject = 'beat' THEN 'The analysis finds no beat within 150 ms.'
        ELSE 'By the classes that hold no such run or pause begins within 150 ms.'
    END AS reason
FROM unmet
INNER JOIN anew.recordings AS recordings ON recordings.recording_id = unmet.recording_id
LEFT JOIN anew.segments AS segments
    ON segments.recording_id = unmet.recording_id
    AND unmet.start_utc >= segments.start_utc AND unmet.start_utc < segments.end_utc
WHERE unmet.decision <> 'withdraw'
