-- one row per episode of the published analysis that over-readers reject; key recording_id, episode_kind, segment, first_sample
-- A decision meets an episode of its kind that begins within 150 ms of the one that was read. The latest decision of each
-- reader holds; where readers differ, the episode stays.
WITH latest AS (
    SELECT recording_id, episode_kind, segment, sample, arg_max(decision, (reviewed_utc, delivery_id)) AS decision
    FROM lake.decisions
    WHERE decision_subject = 'episode'
    GROUP BY recording_id, episode_kind, segment, sample, reader_code
),

agreed AS (
    SELECT recording_id, episode_kind, segment, sample
    FROM latest
    GROUP BY ALL
    HAVING bool_and(decision = 'reject')
)

SELECT episode.recording_id, episode.episode_kind, episode.segment, episode.first_sample
FROM lake.episodes AS episode
INNER JOIN lake.recordings AS recording ON recording.recording_id = episode.recording_id
SEMI JOIN agreed
    ON agreed.recording_id = episode.recording_id
    AND agreed.episode_kind = episode.episode_kind
    AND agreed.segment = episode.segment
    AND abs(agreed.sample - episode.first_sample) <= 0.15 * recording.fs_hz
