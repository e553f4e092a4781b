-- Which wear days have too few analysable hours to count as valid?
SELECT patient_code, local_day, worn_h, analysable_h, clock_hours_covered
FROM wear_days
WHERE NOT is_valid_day
ORDER BY patient_code, local_day
