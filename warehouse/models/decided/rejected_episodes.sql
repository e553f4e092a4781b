-- one row per kind and instant of an episode that every over-reader of it rejects; key recording_id, episode_kind, start_utc
-- Known by its instant, so that it is met again under another detector and when late parts renumber the segments. The
-- latest decision of each reader holds; where readers differ, the episode stays.
WITH latest AS (
    SELECT
        recording_id,
        episode_kind,
        start_utc,
        arg_max(decision, (reviewed_utc, delivery_id)) AS decision
    FROM lake.decisions
    WHERE decision_subject = 'episode'
    GROUP BY recording_id, episode_kind, start_utc, reader_code
)

SELECT recording_id, episode_kind, start_utc
FROM latest
WHERE decision <> 'withdraw'
GROUP BY ALL
HAVING bool_and(decision = 'reject')
