-- one row per recording and quarter hour, by the classes that hold; key recording_id, quarter_utc
-- Over-read recordings are counted anew from the decided classes (`flows.over_read`). Seconds become decimals, so that
-- no sum of them depends on the order of the rows.
WITH quarters AS (
    SELECT *, 0 AS decided_beats
    FROM lake.quarter_hours
    ANTI JOIN reviewed.quarter_hours USING (recording_id)
    UNION ALL BY NAME
    FROM reviewed.quarter_hours
)

SELECT
    * REPLACE (
        recorded_s::DECIMAL(18, 6) AS recorded_s,
        worn_s::DECIMAL(18, 6) AS worn_s,
        analysable_s::DECIMAL(18, 6) AS analysable_s,
        rr_sum_s::DECIMAL(18, 6) AS rr_sum_s,
        bigeminy_s::DECIMAL(18, 6) AS bigeminy_s,
        trigeminy_s::DECIMAL(18, 6) AS trigeminy_s,
        irregular_s::DECIMAL(18, 6) AS irregular_s
    )
FROM quarters
