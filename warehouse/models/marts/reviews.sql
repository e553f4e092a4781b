-- one row per beat whose class an over-reader's file decides; key delivery_id, segment, sample
SELECT * FROM lake.reviews
