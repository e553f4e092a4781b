-- Which deliveries wait or were refused, and what is to be done?
SELECT file_name, status, code, reason, received_utc
FROM deliveries
WHERE status IN ('waiting', 'quarantined')
ORDER BY status, received_utc, file_name
