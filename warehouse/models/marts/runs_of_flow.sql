-- one row per run of the nightly flow that had something to do; key run_id
SELECT * FROM lake.runs_of_flow
