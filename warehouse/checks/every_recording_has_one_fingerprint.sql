-- a returned row is a recording whose published results come from more than one detector version or settings
SELECT recording_id, count(DISTINCT fingerprint) AS fingerprints
FROM lake.quarter_hours
GROUP BY recording_id
HAVING count(DISTINCT fingerprint) > 1
