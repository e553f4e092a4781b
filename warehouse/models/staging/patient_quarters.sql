-- one row per recording and quarter hour that counts for its patient; key recording_id, quarter_utc
-- A quarter hour that two recordings of a patient cover for longer than it lasts (two patches at once) counts once:
-- the recording with more analysable time. Two patches worn one after the other within a quarter hour both count.
WITH quarters AS (
    SELECT
        wear.patient_code,
        wear.patient_zone,
        quarter.*,
        sum(quarter.recorded_s) OVER shared AS shared_s,
        row_number() OVER (shared ORDER BY quarter.analysable_s DESC, quarter.recording_id) AS place
    FROM lake.quarter_hours AS quarter
    INNER JOIN recording_wears AS wear ON wear.recording_id = quarter.recording_id
    WINDOW shared AS (PARTITION BY wear.patient_code, quarter.quarter_utc)
)
SELECT
    * EXCLUDE (shared_s, place),
    -- Zone arithmetic on quarter hours, never on beats: every civil zone lies whole quarter hours from UTC.
    timezone(patient_zone, quarter_utc::TIMESTAMPTZ) AS quarter_local
FROM quarters
WHERE shared_s <= 900.5 OR place = 1
