-- one row per pair of readers with beats in common; key reader_code, other_reader_code
-- Families count with all their beats. Cohen's kappa: agreement beyond what the readers' own shares of classes would give.
WITH pairs AS (
    SELECT
        one.reader_code,
        other.reader_code AS other_reader_code,
        one.decided_class AS decision,
        other.decided_class AS other_decision,
        sum(one.beat_count) AS beats
    FROM latest_decisions AS one
    INNER JOIN latest_decisions AS other
        ON one.recording_id = other.recording_id
        AND one.read_fingerprint = other.read_fingerprint
        AND one.decision_subject = other.decision_subject
        AND one.family IS NOT DISTINCT FROM other.family
        AND one.part_class IS NOT DISTINCT FROM other.part_class
        AND one.segment IS NOT DISTINCT FROM other.segment
        AND one.sample IS NOT DISTINCT FROM other.sample
        AND one.reader_code < other.reader_code
    GROUP BY ALL
),

totals AS (
    SELECT
        reader_code,
        other_reader_code,
        sum(beats) AS beats,
        sum(beats) FILTER (WHERE decision = other_decision) AS agreed
    FROM pairs
    GROUP BY reader_code, other_reader_code
),

shares AS (
    SELECT one.reader_code, one.other_reader_code, sum(one.beats * other.beats) AS by_chance
    FROM (SELECT reader_code, other_reader_code, decision, sum(beats) AS beats FROM pairs GROUP BY ALL) AS one
    INNER JOIN
        (SELECT reader_code, other_reader_code, other_decision, sum(beats) AS beats FROM pairs GROUP BY ALL) AS other
        ON one.reader_code = other.reader_code
        AND one.other_reader_code = other.other_reader_code
        AND one.decision = other.other_decision
    GROUP BY one.reader_code, one.other_reader_code
)

SELECT
    totals.reader_code,
    totals.other_reader_code,
    beats AS beats_in_common,
    100 * coalesce(agreed, 0) / beats AS agreed_pct,
    (coalesce(agreed, 0) / beats - coalesce(by_chance, 0) / (beats * beats))
    / nullif(1 - coalesce(by_chance, 0) / (beats * beats), 0) AS kappa
FROM totals
LEFT JOIN shares USING (reader_code, other_reader_code)
