-- one row per decision in an over-reader's file; key delivery_id, decision_order
SELECT * FROM lake.decisions
