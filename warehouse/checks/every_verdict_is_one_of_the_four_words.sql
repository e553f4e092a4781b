-- a returned row is a change whose verdict is not one of the words that pages and exports know
SELECT patient_code, therapy_id, measure, verdict
FROM changes
WHERE verdict IS NULL
    OR verdict NOT IN ('fell_beyond_chance', 'rose_beyond_chance', 'within_chance', 'too_little_wear')
