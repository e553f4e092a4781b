-- one row per patient button or diary mark, recording and instant; key recording_id, mark_utc, mark_text
-- A mark that several deliveries of a recording hold is one mark.
SELECT
    mark.recording_id,
    wear.patient_code,
    mark.mark_utc,
    coalesce(mark.mark_text, '') AS mark_text,
    max(mark.duration_s) AS duration_s
FROM lake.marks AS mark
INNER JOIN recording_wears AS wear USING (recording_id)
GROUP BY mark.recording_id, wear.patient_code, mark.mark_utc, coalesce(mark.mark_text, '')
