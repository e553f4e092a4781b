-- one row per recording, shape family and local day on which it has counted beats; key recording_id, family, local_day
-- Family -1 stands for beats of no family, so that the shares of a recording's day add up to 100.
WITH days AS (
    SELECT
        quarter.recording_id,
        quarter.patient_code,
        family.family,
        quarter.quarter_local::DATE AS local_day,
        sum(family.beat_count) AS beat_count
    FROM lake.family_quarters AS family
    INNER JOIN patient_quarters AS quarter USING (recording_id, quarter_utc)
    GROUP BY quarter.recording_id, quarter.patient_code, family.family, quarter.quarter_local::DATE
)

SELECT
    days.*,
    100 * beat_count / sum(beat_count) OVER (PARTITION BY recording_id, local_day) AS share_of_day_pct
FROM days
