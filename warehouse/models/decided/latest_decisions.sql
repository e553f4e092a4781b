-- one row per reader and family, part of a family, or beat: the reader's latest decision, unless it is withdrawn
-- key recording_id, read_fingerprint, reader_code, decision_subject, family, part_class, segment, sample
-- Family numbers hold within the analysis that was read only. A part holds as long as no later file speaks of its family,
-- and whatever was said of a family or its beats until that is withdrawn.
WITH words AS (
    SELECT *, CASE decision_subject WHEN 'part' THEN automatic_class END AS part_class
    FROM lake.decisions
    WHERE decision_subject IN ('family', 'part', 'beat')
),

families AS (
    SELECT
        recording_id,
        read_fingerprint,
        reader_code,
        family,
        max((reviewed_utc, delivery_id)) AS latest_word,
        max((reviewed_utc, delivery_id)) FILTER (WHERE decision = 'withdraw') AS withdrawal
    FROM words
    WHERE decision_subject = 'family'
    GROUP BY recording_id, read_fingerprint, reader_code, family
),

latest AS (
    SELECT *
    FROM words
    WHERE decision IS NOT NULL
    QUALIFY row_number() OVER (
        PARTITION BY recording_id, read_fingerprint, reader_code, decision_subject, family, part_class, segment, sample
        ORDER BY reviewed_utc DESC, delivery_id DESC
    ) = 1
)

SELECT latest.*, CASE decision WHEN 'accept' THEN automatic_class ELSE decision END AS decided_class
FROM latest
LEFT JOIN families USING (recording_id, read_fingerprint, reader_code, family)
WHERE
    decision <> 'withdraw'
    AND (decision_subject <> 'part' OR (reviewed_utc, delivery_id) = latest_word)
    AND (withdrawal IS NULL OR (reviewed_utc, delivery_id) >= withdrawal)
