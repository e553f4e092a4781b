-- a returned row is a patient whose wear days and quarter hours do not hold the same beats
WITH from_quarters AS (
    SELECT patient_code, sum(all_beats) AS quarter_beats, sum(v_beats) AS quarter_v_beats
    FROM patient_quarters
    WHERE worn_s > 0
    GROUP BY patient_code
),

from_days AS (
    SELECT patient_code, sum(all_beats) AS day_beats, sum(v_beats) AS day_v_beats
    FROM anew.wear_days
    GROUP BY patient_code
)

SELECT patient_code, quarter_beats, day_beats, quarter_v_beats, day_v_beats
FROM from_quarters
FULL JOIN from_days USING (patient_code)
WHERE quarter_beats IS DISTINCT FROM day_beats OR quarter_v_beats IS DISTINCT FROM day_v_beats
