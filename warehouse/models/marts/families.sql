-- one row per shape family of a recording that has a wear in the register; key recording_id, family
WITH decided AS (
    SELECT recording_id, family, decision, count(*) AS beats
    FROM decided_beats
    GROUP BY ALL
),

-- Accepted normal beats are no rows of the decisions, so the class holds once more than half of all beats carry it.
classes AS (
    SELECT decided.recording_id, decided.family, any_value(decided.decision) AS decided_class
    FROM decided
    INNER JOIN lake.families AS family USING (recording_id, family)
    WHERE decided.beats > 0.5 * family.beat_count
    GROUP BY decided.recording_id, decided.family
)

SELECT row.*, classes.decided_class
FROM lake.families AS row
INNER JOIN recording_wears USING (recording_id)
LEFT JOIN classes USING (recording_id, family)
