-- one row per reader and family or beat with a class decided: the reader's latest decision, by its class
WITH classed AS (
    SELECT
        * REPLACE (CASE decision WHEN 'accept' THEN automatic_class ELSE decision END AS decision)
    FROM lake.decisions
    WHERE decision_subject IN ('family', 'beat') AND decision IS NOT NULL
)

SELECT *
FROM classed
QUALIFY row_number() OVER (
    PARTITION BY recording_id, read_fingerprint, reader_code, decision_subject, family, segment, sample
    ORDER BY reviewed_utc DESC, delivery_id DESC
) = 1
