-- one row per change that can move a number, deliveries and reviews among them; key change_id
SELECT change_id, happened_utc, actor_code, change_kind, subject, old_value, new_value, reason
FROM lake.audit
UNION ALL
SELECT
    'delivery ' || delivery_id,
    received_utc,
    NULL,
    'delivery',
    coalesce(recording_id, file_name),
    NULL,
    status,
    reason
FROM lake.deliveries
UNION ALL
SELECT
    concat_ws(' ', 'decision', delivery_id, decision_order),
    reviewed_utc,
    reader_code,
    'review',
    concat_ws(' ', recording_id, coalesce(episode_kind, decision_subject), CASE WHEN decision_subject <> 'beat' THEN family END, coalesce(strftime(start_utc, 'at %Y-%m-%d %H:%M:%S UTC'),
        'at sample ' || sample || ' of segment ' || segment)),
    automatic_class,
    CASE WHEN is_mixed THEN 'split' ELSE coalesce(decision, 'same shape as family ' || same_as_family) END,
    note
FROM lake.decisions
