-- one row per reader and beat of a recording built anew: the reader's latest word on it; key recording_id, decided_utc, reader_code
SELECT
    recording_id,
    beat_utc AS decided_utc,
    reader_code,
    arg_max(decision, (reviewed_utc, delivery_id)) AS decision,
    arg_max(delivery_id, (reviewed_utc, delivery_id)) AS delivery_id,
    max(reviewed_utc) AS reviewed_utc
FROM lake.reviews
ANTI JOIN kept.wears USING (recording_id)
GROUP BY recording_id, beat_utc, reader_code
