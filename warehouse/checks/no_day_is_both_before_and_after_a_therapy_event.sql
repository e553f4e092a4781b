-- a returned row is a therapy event with a baseline that reaches it, or an after period that begins before it
SELECT period.therapy_id, period.period, period.first_day, period.last_day, therapy.therapy_day
FROM periods AS period
INNER JOIN therapies AS therapy ON therapy.therapy_id = period.therapy_id
WHERE (period.period = 'baseline' AND period.last_day >= therapy.therapy_day)
    OR (period.period <> 'baseline' AND period.first_day < therapy.therapy_day)
