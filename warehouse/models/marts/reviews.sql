-- one row per decision of an over-reader; key recording_id, segment, sample, reader_code
SELECT * FROM lake.reviews
