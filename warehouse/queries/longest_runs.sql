-- Which are the longest ventricular runs, and how fast were they?
SELECT recordings.patient_code, episodes.start_utc, episodes.beat_count, episodes.rate_bpm, episodes.duration_s
FROM episodes
INNER JOIN recordings USING (recording_id)
WHERE episode_kind = 'run' AND is_counted
ORDER BY beat_count DESC, rate_bpm DESC, patient_code
LIMIT 20
