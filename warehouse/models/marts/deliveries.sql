-- one row per file set that arrived; key delivery_id
SELECT * FROM lake.deliveries
