-- one row per recording and quarter hour that counts for its patient; key recording_id, quarter_utc
-- A quarter hour that two recordings of a patient cover for longer than it lasts (two patches at once) counts once:
-- the recording with more analysable time. Two patches worn one after the other within a quarter hour both count.
WITH covered_twice AS (
    SELECT wear.patient_code, quarter.quarter_utc
    FROM counted_quarters AS quarter
    INNER JOIN recording_wears AS wear USING (recording_id)
    GROUP BY wear.patient_code, quarter.quarter_utc
    HAVING count(*) > 1 AND sum(quarter.recorded_s) > 900.5
),

left_out AS (
    SELECT quarter.recording_id, quarter.quarter_utc
    FROM covered_twice
    INNER JOIN recording_wears AS wear USING (patient_code)
    INNER JOIN counted_quarters AS quarter USING (recording_id, quarter_utc)
    QUALIFY row_number() OVER (
        PARTITION BY wear.patient_code, quarter.quarter_utc ORDER BY quarter.analysable_s DESC, quarter.recording_id
    ) > 1
)

SELECT
    wear.patient_code,
    wear.patient_zone,
    quarter.*,
    -- Zone arithmetic on quarter hours, never on beats: every civil zone lies whole quarter hours from UTC.
    quarter.quarter_utc + to_seconds(rule.offset_s) AS quarter_local
FROM counted_quarters AS quarter
INNER JOIN recording_wears AS wear USING (recording_id)
INNER JOIN programme.zone_offsets AS rule
    ON rule.zone = wear.patient_zone AND quarter.quarter_utc >= rule.from_utc AND quarter.quarter_utc < rule.to_utc
ANTI JOIN left_out USING (recording_id, quarter_utc)
