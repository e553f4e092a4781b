-- one row per therapy event and measure whose verdict differs between two builds; key therapy_id, measure
SELECT
    coalesce(a.patient_code, b.patient_code) AS patient_code,
    coalesce(a.therapy_id, b.therapy_id) AS therapy_id,
    coalesce(a.measure, b.measure) AS measure,
    a.verdict AS verdict_a,
    b.verdict AS verdict_b,
    a.change_pct AS change_pct_a,
    b.change_pct AS change_pct_b
FROM changes_a AS a
FULL JOIN changes_b AS b ON a.therapy_id = b.therapy_id AND a.measure = b.measure
WHERE a.verdict IS DISTINCT FROM b.verdict
ORDER BY patient_code, therapy_id, measure
