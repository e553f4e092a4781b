-- one row per recording and quarter hour, beats counted by the class that holds; key recording_id, quarter_utc
-- Decisions of over-readers move beats between the classes; what they call noise is no beat. Runs and pauses that
-- they reject are not counted; couplets and rates stay as found automatically. Seconds become decimals, so that no sum of them depends on the order of the rows.
WITH moved AS (
    SELECT
        recording_id,
        time_bucket(INTERVAL 15 MINUTE, beat_utc) AS quarter_utc,
        count(*) AS decided_beats,
        count(*) FILTER (WHERE decision = 'N') - count(*) FILTER (WHERE beat_class = 'N') AS n_more,
        count(*) FILTER (WHERE decision = 'S') - count(*) FILTER (WHERE beat_class = 'S') AS s_more,
        count(*) FILTER (WHERE decision = 'V') - count(*) FILTER (WHERE beat_class = 'V') AS v_more,
        count(*) FILTER (WHERE decision = 'F') - count(*) FILTER (WHERE beat_class = 'F') AS f_more,
        count(*) FILTER (WHERE decision = 'Q') - count(*) FILTER (WHERE beat_class = 'Q') AS q_more,
        count(*) FILTER (WHERE decision = 'noise') AS noise
    FROM decided_beats
    WHERE is_analysable
    GROUP BY ALL
)

SELECT
    quarter.* REPLACE (
        n_beats + coalesce(n_more, 0) AS n_beats,
        s_beats + coalesce(s_more, 0) AS s_beats,
        v_beats + coalesce(v_more, 0) AS v_beats,
        f_beats + coalesce(f_more, 0) AS f_beats,
        q_beats + coalesce(q_more, 0) AS q_beats,
        all_beats - coalesce(noise, 0) AS all_beats,
        recorded_s::DECIMAL(18, 6) AS recorded_s,
        worn_s::DECIMAL(18, 6) AS worn_s,
        analysable_s::DECIMAL(18, 6) AS analysable_s,
        rr_sum_s::DECIMAL(18, 6) AS rr_sum_s,
        bigeminy_s::DECIMAL(18, 6) AS bigeminy_s,
        trigeminy_s::DECIMAL(18, 6) AS trigeminy_s,
        irregular_s::DECIMAL(18, 6) AS irregular_s,
        CASE WHEN was_read THEN read_quarters.runs ELSE quarter.runs END AS runs,
        CASE WHEN was_read THEN read_quarters.sv_runs ELSE quarter.sv_runs END AS sv_runs,
        CASE WHEN was_read THEN read_quarters.pauses ELSE quarter.pauses END AS pauses,
        CASE WHEN was_read THEN read_quarters.longest_run_beats ELSE quarter.longest_run_beats END AS longest_run_beats,
        CASE WHEN was_read THEN read_quarters.fastest_run_bpm ELSE quarter.fastest_run_bpm END AS fastest_run_bpm,
        CASE WHEN was_read THEN read_quarters.longest_pause_ms ELSE quarter.longest_pause_ms END AS longest_pause_ms
    ),
    coalesce(decided_beats, 0) AS decided_beats
FROM lake.quarter_hours AS quarter
LEFT JOIN moved USING (recording_id, quarter_utc)
LEFT JOIN read_quarters USING (recording_id, quarter_utc)
