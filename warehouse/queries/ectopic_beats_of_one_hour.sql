-- Which ventricular beats lie in the hour of the highest burden of the programme?
WITH worst AS (
    SELECT recording_id, hour_utc
    FROM hours
    WHERE all_beats > 0
    ORDER BY v_beats / all_beats DESC, recording_id, hour_utc
    LIMIT 1
)

SELECT beats.recording_id, beats.beat_utc, beats.family, beats.coupling_ms, beats.class_probability
FROM beats
INNER JOIN worst ON beats.recording_id = worst.recording_id
    AND beats.beat_utc >= worst.hour_utc AND beats.beat_utc < worst.hour_utc + INTERVAL 1 HOUR
WHERE beats.beat_class = 'V' AND beats.is_analysable
ORDER BY beats.beat_utc
