-- a returned row is a recording whose hours and own total do not hold the same beats
WITH from_hours AS (
    SELECT recording_id, sum(all_beats) AS hour_beats, sum(v_beats) AS hour_v_beats
    FROM anew.hours
    GROUP BY recording_id
)

SELECT recordings.recording_id, recordings.all_beats, hour_beats, recordings.v_beats, hour_v_beats
FROM anew.recordings AS recordings
LEFT JOIN from_hours USING (recording_id)
WHERE recordings.all_beats IS DISTINCT FROM hour_beats OR recordings.v_beats IS DISTINCT FROM hour_v_beats
