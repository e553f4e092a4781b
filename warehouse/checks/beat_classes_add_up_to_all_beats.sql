-- a returned row is a quarter hour whose beats by class are not its beats of all classes
SELECT recording_id, quarter_utc, n_beats, s_beats, v_beats, f_beats, q_beats, all_beats
FROM counted_quarters
WHERE n_beats + s_beats + v_beats + f_beats + q_beats <> all_beats
