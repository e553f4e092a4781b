-- one row per recording and shape family, in the order in which an over-reader decides; key recording_id, family
-- A decision on a ventricular family moves the burden by all its beats, so these come first, largest first. Of the rest
-- the larger come first, too: a family that is ventricular after all would add that many beats.
WITH ordered AS (
    SELECT
        recording_id,
        family,
        family_class,
        beat_count,
        row_number() OVER in_order AS review_rank,
        sum(beat_count) FILTER (WHERE family_class = 'V') OVER (PARTITION BY recording_id) AS v_total,
        sum(beat_count) FILTER (WHERE family_class = 'V') OVER in_order AS v_settled
    FROM families
    WINDOW in_order AS (PARTITION BY recording_id ORDER BY family_class = 'V' DESC, beat_count DESC, family)
)

SELECT
    recording_id,
    review_rank,
    family,
    family_class,
    beat_count,
    100 * (CASE WHEN family_class = 'V' THEN beat_count ELSE 0 END) / nullif(v_total, 0) AS v_share_pct,
    100 * v_settled / nullif(v_total, 0) AS settled_pct
FROM ordered
