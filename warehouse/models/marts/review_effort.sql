-- one row per recording with a ventricular family: what it takes to settle its burden; key recording_id
-- 20 seconds a decision (a shape and two strips to look at) are common practice, no source.
WITH reached AS (
    SELECT recording_id, min(review_rank) AS decisions_to_goal
    FROM review_sheet
    WHERE settled_pct >= 95
    GROUP BY recording_id
)

SELECT
    sheet.recording_id,
    recordings.patient_code,
    decisions_to_goal,
    settled_pct,
    20 AS seconds_per_decision,
    decisions_to_goal * 20 / 60 AS minutes_to_goal,
    coalesce(reviewed.decided_v_pct, 0) AS decided_v_pct
FROM reached
INNER JOIN review_sheet AS sheet
    ON sheet.recording_id = reached.recording_id AND sheet.review_rank = reached.decisions_to_goal
INNER JOIN recordings ON recordings.recording_id = sheet.recording_id
LEFT JOIN reviewed ON reviewed.recording_id = sheet.recording_id
