-- one row per recording and quarter hour with a rejected episode: the runs and pauses that stay; key recording_id, quarter_utc
WITH judged AS (
    SELECT
        episode.recording_id,
        time_bucket(INTERVAL 15 MINUTE, episode.start_utc) AS quarter_utc,
        rejected.first_sample IS NOT NULL AS is_rejected,
        CASE WHEN rejected.first_sample IS NULL THEN episode.episode_kind END AS kind_left,
        episode.beat_count,
        episode.rate_bpm,
        episode.duration_s
    FROM lake.episodes AS episode
    LEFT JOIN rejected_episodes AS rejected USING (recording_id, episode_kind, segment, first_sample)
    WHERE episode.recording_id IN (SELECT recording_id FROM rejected_episodes)
)

SELECT
    recording_id,
    quarter_utc,
    true AS was_read,
    count(*) FILTER (WHERE kind_left = 'run') AS runs,
    count(*) FILTER (WHERE kind_left = 'sv_run') AS sv_runs,
    count(*) FILTER (WHERE kind_left = 'pause') AS pauses,
    coalesce(max(beat_count) FILTER (WHERE kind_left = 'run'), 0) AS longest_run_beats,
    max(rate_bpm) FILTER (WHERE kind_left = 'run') AS fastest_run_bpm,
    max(1000 * duration_s) FILTER (WHERE kind_left = 'pause') AS longest_pause_ms
FROM judged
GROUP BY recording_id, quarter_utc
HAVING bool_or(is_rejected)
