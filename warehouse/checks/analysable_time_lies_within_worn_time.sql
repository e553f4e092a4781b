-- a returned row is a quarter hour with more analysable than worn, more worn than recorded, or more than 15 minutes
-- 0.01 s absorbs the rounding of sums of sample spans.
SELECT recording_id, quarter_utc, recorded_s, worn_s, analysable_s
FROM lake.quarter_hours
WHERE analysable_s > worn_s + 0.01 OR worn_s > recorded_s + 0.01 OR recorded_s > 900.01 OR analysable_s < 0
