-- a returned row is a recording with hours that begin before or end after what was recorded
SELECT
    hours.recording_id,
    min(hour_utc) AS first_hour_utc,
    max(hour_utc) AS last_hour_utc,
    any_value(start_utc) AS start_utc,
    any_value(end_utc) AS end_utc
FROM anew.hours AS hours
INNER JOIN anew.recordings USING (recording_id)
GROUP BY hours.recording_id
HAVING min(hour_utc) < date_trunc('hour', any_value(start_utc)) OR max(hour_utc) > any_value(end_utc)
