-- one row per recording and shape family with counted beats, in the order in which an over-reader decides; key recording_id, family
-- A decision on a ventricular family moves the burden by all its beats, so these come first, largest first. Of the rest
-- the larger come first, too: a family that is ventricular after all would add that many beats.
WITH counted AS (
    SELECT recording_id, family, sum(beat_count) AS beat_count
    FROM anew.family_days
    GROUP BY recording_id, family
),

classed AS (
    SELECT
        recording_id,
        family,
        sum(n_beats) AS n_beats,
        sum(s_beats) AS s_beats,
        sum(v_beats) AS v_beats,
        sum(f_beats) AS f_beats,
        sum(q_beats) AS q_beats
    FROM lake.family_quarters
    GROUP BY recording_id, family
),

ordered AS (
    SELECT
        family.recording_id,
        family.family,
        family.family_class,
        counted.beat_count,
        classed.* EXCLUDE (recording_id, family),
        row_number() OVER in_order AS review_rank,
        sum(counted.beat_count) FILTER (WHERE family.family_class = 'V') OVER (PARTITION BY family.recording_id) AS v_total,
        sum(counted.beat_count) FILTER (WHERE family.family_class = 'V') OVER in_order AS v_settled
    FROM lake.families AS family
    INNER JOIN recording_wears USING (recording_id)
    INNER JOIN counted USING (recording_id, family)
    INNER JOIN classed USING (recording_id, family)
    WINDOW in_order AS (
        PARTITION BY family.recording_id
        ORDER BY family.family_class = 'V' DESC, counted.beat_count DESC, family.family
    )
)

SELECT
    recording_id,
    review_rank,
    family,
    family_class,
    beat_count,
    n_beats,
    s_beats,
    v_beats,
    f_beats,
    q_beats,
    100 * (CASE WHEN family_class = 'V' THEN beat_count ELSE 0 END) / nullif(v_total, 0) AS v_share_pct,
    100 * v_settled / nullif(v_total, 0) AS settled_pct
FROM ordered
