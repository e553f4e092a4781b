-- one row per episode of a recording that has a wear in the register, found automatically or by the classes that readers decided
-- key recording_id, episode_kind, segment, first_sample, last_sample
WITH over_read AS (SELECT DISTINCT recording_id FROM reviewed.quarter_hours),

of_either AS (
    SELECT *, true AS is_automatic, false AS is_counted
    FROM lake.episodes
    SEMI JOIN over_read USING (recording_id)
    UNION ALL BY NAME
    SELECT *, false AS is_automatic
    FROM reviewed.episodes
),

found AS (
    SELECT
        recording_id,
        any_value(fingerprint) AS fingerprint,
        episode_kind,
        segment,
        first_sample,
        last_sample,
        any_value(start_utc) AS start_utc,
        any_value(end_utc) AS end_utc,
        -- A beat that a reader calls noise changes the figures of an episode between the same ends: what is counted holds.
        arg_max(beat_count, is_counted) AS beat_count,
        any_value(duration_s) AS duration_s,
        arg_max(rate_bpm, is_counted) AS rate_bpm,
        bool_or(is_automatic) AS is_automatic,
        bool_or(is_counted) AS is_counted
    FROM of_either
    GROUP BY recording_id, episode_kind, segment, first_sample, last_sample
    UNION ALL BY NAME
    SELECT *, true AS is_automatic, true AS is_counted
    FROM lake.episodes
    ANTI JOIN over_read USING (recording_id)
)

SELECT found.*
FROM found
INNER JOIN recording_wears USING (recording_id)
