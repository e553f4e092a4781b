-- a returned row is a therapy event without exactly baseline, settling and after
SELECT therapies.therapy_id, count(periods.period) AS periods_found
FROM therapies
LEFT JOIN periods ON periods.therapy_id = therapies.therapy_id
GROUP BY therapies.therapy_id
HAVING count(DISTINCT periods.period) <> 3 OR count(periods.period) <> 3
