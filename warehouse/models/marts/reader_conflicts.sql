-- one row per family, part of a family or beat that two readers decided differently
-- key recording_id, read_fingerprint, decision_subject, family, part_class, segment, sample, reader_code, other_reader_code
SELECT
    one.recording_id,
    one.read_fingerprint,
    one.decision_subject,
    one.family,
    one.part_class,
    one.segment,
    one.sample,
    one.beat_count,
    one.reader_code,
    one.decided_class AS decision,
    other.reader_code AS other_reader_code,
    other.decided_class AS other_decision
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
WHERE one.decided_class <> other.decided_class
