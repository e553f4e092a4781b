-- one row per patient and reason for a look that episodes, shape families and wears give; key patient_code, attention_code
-- "Now" is the latest day with wear in the whole programme, so the list follows from the data and not from a clock.
WITH placed AS (
    SELECT recording_id, patient_code, rule.from_utc, rule.to_utc, rule.offset_s
    FROM recordings
    INNER JOIN patients USING (patient_code)
    INNER JOIN programme.zone_offsets AS rule ON rule.zone = patients.zone
),

sustained AS (
    SELECT
        placed.patient_code,
        episode.duration_s,
        episode.rate_bpm,
        (episode.start_utc + to_seconds(placed.offset_s))::DATE AS local_day
    FROM episodes AS episode
    CROSS JOIN programme.settings AS settings
    INNER JOIN placed
        ON placed.recording_id = episode.recording_id
        AND episode.start_utc >= placed.from_utc AND episode.start_utc < placed.to_utc
    WHERE episode.episode_kind = 'run' AND episode.is_counted AND episode.duration_s >= settings.attention_sustained_run_s
),

-- Of fewer beats the mean is too easily a matter of beats found at the wrong place.
early AS (
    SELECT
        placed.patient_code,
        family.mean_coupling_ms,
        family.beat_count,
        recording.recording_id,
        (recording.start_utc + to_seconds(placed.offset_s))::DATE AS local_day
    FROM families AS family
    CROSS JOIN programme.settings AS settings
    INNER JOIN recordings AS recording ON recording.recording_id = family.recording_id
    INNER JOIN placed
        ON placed.recording_id = family.recording_id
        AND recording.start_utc >= placed.from_utc AND recording.start_utc < placed.to_utc
    WHERE coalesce(family.decided_class, family.family_class) = 'V' AND family.beat_count >= 10
        AND family.mean_coupling_ms < settings.attention_short_coupling_ms
),

now AS (SELECT max(local_day) AS latest_day FROM wear_days),

-- A wear whose recording reaches its end is over, however near its end lies.
ending AS (
    SELECT wear.patient_code, wear.device_serial, wear.to_utc::DATE AS last_day, now.latest_day
    FROM register.wears AS wear
    CROSS JOIN now
    CROSS JOIN programme.settings AS settings
    LEFT JOIN recordings AS recording ON recording.recording_id = wear.recording_id
    WHERE wear.from_utc < now.latest_day + INTERVAL 1 DAY AND wear.to_utc > now.latest_day
        AND date_diff('day', now.latest_day, wear.to_utc::DATE) <= settings.attention_patch_end_days
        AND (recording.end_utc IS NULL OR recording.end_utc < wear.to_utc - INTERVAL 12 HOUR)
)

SELECT
    patient_code,
    'sustained_run' AS attention_code,
    max(duration_s) AS weight,
    min(local_day) AS since_day,
    printf('ventricular run of %.0f s at %.0f/min, the longest of %d that reach %g s, on %s', max(duration_s),
        arg_max(rate_bpm, row(duration_s, rate_bpm)), count(*), any_value(settings.attention_sustained_run_s),
        arg_max(local_day, row(duration_s, rate_bpm, local_day))::VARCHAR) AS attention_reason
FROM sustained, programme.settings AS settings
GROUP BY patient_code
UNION ALL
SELECT
    patient_code,
    'short_coupling',
    -min(mean_coupling_ms),
    min(local_day),
    printf('ventricular beats come %.0f ms after the beat before in a family of %d beats of the recording from %s; the line is %g ms',
        min(mean_coupling_ms), arg_min(beat_count, row(mean_coupling_ms, recording_id, beat_count)),
        arg_min(local_day, row(mean_coupling_ms, recording_id, beat_count))::VARCHAR,
        any_value(settings.attention_short_coupling_ms))
FROM early, programme.settings AS settings
GROUP BY patient_code
UNION ALL
SELECT
    patient_code,
    'patch_about_to_end',
    -date_diff('day', min(latest_day), min(last_day)),
    min(latest_day),
    printf('the wear of device %s ends on %s by the register; the latest day with wear in the programme is %s',
        arg_min(device_serial, (last_day, device_serial)), min(last_day)::VARCHAR, min(latest_day)::VARCHAR)
FROM ending
GROUP BY patient_code
