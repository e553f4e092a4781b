-- one row per reader and beat whose word meets a beat of the published analysis; key recording_id, decided_utc, reader_code
-- It meets the nearest beat within 150 ms of its instant, so decisions survive a new detector, as long as it finds the
-- beat, and parts that arrive late and renumber segments and samples.
WITH found AS (
    SELECT recording_id, segment, sample, beat_utc, beat_class, family, is_analysable
    FROM lake.beats
    WHERE recording_id IN (SELECT recording_id FROM latest_reviews)
),

neighbours AS (
    SELECT latest.*, found.* EXCLUDE (recording_id)
    FROM latest_reviews AS latest
    ASOF JOIN found ON latest.recording_id = found.recording_id AND latest.decided_utc >= found.beat_utc
    UNION ALL
    SELECT latest.*, found.* EXCLUDE (recording_id)
    FROM latest_reviews AS latest
    ASOF JOIN found ON latest.recording_id = found.recording_id AND latest.decided_utc <= found.beat_utc
)

SELECT *, abs(epoch_us(decided_utc) - epoch_us(beat_utc)) AS apart_us
FROM neighbours
WHERE apart_us <= 150000
QUALIFY row_number() OVER (PARTITION BY recording_id, decided_utc, reader_code ORDER BY apart_us, beat_utc) = 1
