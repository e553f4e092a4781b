-- How much of each day does each ventricular focus of a patient make, before and after, from patch to patch?
SELECT
    family_days.patient_code, patient_families.patient_family, family_days.local_day,
    sum(family_days.beat_count) AS beats, sum(family_days.share_of_day_pct) AS share_of_day_pct
FROM family_days
INNER JOIN patient_families USING (recording_id, family)
WHERE patient_families.family_class = 'V'
GROUP BY ALL
ORDER BY patient_code, patient_family, local_day
