"""The one column dictionary: every column's type, unit and meaning, and every table's grain and columns.

DDL, part validation, COMMENTs, the `data_dictionary` table and its page are all made from here.
A column name means the same thing in every table that carries it.
Instants are UTC without zone in storage (`TIMESTAMP`, microseconds); the zone stands in its own column.
Missing is NULL, never 0.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Column:
    """One column name with its DuckDB type, unit ('' when it has none) and meaning in one sentence."""

    name: str
    type: str
    unit: str
    meaning: str


@dataclass(frozen=True)
class Table:
    """One table: what a row is, which columns identify a row, which columns it has (names from COLUMNS)."""

    name: str
    grain: str
    key: tuple[str, ...]
    columns: tuple[str, ...]


def _dictionary(*rows: tuple[str, str, str, str]) -> dict[str, Column]:
    named = {row[0]: Column(*row) for row in rows}
    if len(named) != len(rows):
        raise ValueError("a column is described twice in the dictionary")
    return named


COLUMNS: dict[str, Column] = _dictionary(
    # identity
    ("patient_code", "VARCHAR", "", "Pseudonymous code of the patient, as in the register."),
    ("delivery_id", "VARCHAR", "", "Code of one arrived file set: derived from its bytes and its name."),
    ("recording_id", "VARCHAR", "", "Code of one wearing of one patch: device serial and first day of the wear."),
    ("device_serial", "VARCHAR", "", "Serial of the patch, as in the register."),
    ("therapy_id", "VARCHAR", "", "Code of one therapy event of the register."),
    ("fingerprint", "VARCHAR", "", "Hash of the detector version and of every setting that changes results."),
    ("segment", "SMALLINT", "", "Number of the gap-free segment within the recording, from 0."),
    # deliveries
    ("file_name", "VARCHAR", "", "File name as delivered when it holds only register codes; masked otherwise."),
    ("file_bytes", "BIGINT", "bytes", "Size of the delivered file or file set."),
    ("content_sha256", "VARCHAR", "", "SHA-256 of the delivered bytes."),
    ("signal_sha256", "VARCHAR", "", "SHA-256 of samples and rate, the same under any header."),
    ("received_utc", "TIMESTAMP", "UTC", "Modification time of the delivered file."),
    ("status", "VARCHAR", "", "accepted, waiting, skipped or quarantined."),
    ("code", "VARCHAR", "", "Reason code when the delivery was not accepted."),
    ("reason", "VARCHAR", "", "What was found, what was expected and what to do, in one sentence."),
    ("format", "VARCHAR", "", "File format recognised from the bytes."),
    ("findings", "VARCHAR", "", "Codes of oddities that were accepted, separated by blanks."),
    # recordings and segments
    ("start_utc", "TIMESTAMP", "UTC", "First instant."),
    ("end_utc", "TIMESTAMP", "UTC", "Instant after the last sample."),
    ("zone", "VARCHAR", "", "IANA time zone: of the patient's local days, or in which the recorder's clock was read."),
    ("zone_source", "VARCHAR", "", "Where the zone came from: file, patient or programme."),
    ("fs_hz", "DOUBLE", "Hz", "Sampling rate."),
    ("lead", "VARCHAR", "", "Lead label as written in the file."),
    ("mv_per_count", "DOUBLE", "mV", "Millivolts per stored count."),
    ("count_at_zero_mv", "DOUBLE", "counts", "Stored count that stands for 0 mV."),
    ("rail_low_count", "INTEGER", "counts", "Lowest count the recorder can store; a run of it is clipped signal."),
    ("rail_high_count", "INTEGER", "counts", "Highest count the recorder can store; a run of it is clipped signal."),
    ("missing_count", "INTEGER", "counts", "Count that stands for a missing sample, NULL when the format has none."),
    ("segment_count", "SMALLINT", "", "Number of gap-free segments."),
    ("sample_count", "BIGINT", "samples", "Number of samples."),
    ("recorded_h", "DOUBLE", "h", "Hours that hold samples."),
    ("worn_h", "DOUBLE", "h", "Hours with the patch connected to the skin."),
    ("analysable_h", "DOUBLE", "h", "Hours worn, connected and clean enough to classify beats."),
    ("recorded_s", "DOUBLE", "s", "Seconds that hold samples."),
    ("worn_s", "DOUBLE", "s", "Seconds with the patch connected to the skin."),
    ("analysable_s", "DOUBLE", "s", "Seconds worn, connected and clean enough to classify beats."),
    ("block", "INTEGER", "", "Number of the stored sample block within the segment, from 0."),
    (
        "step",
        "USMALLINT",
        "counts",
        "Sample minus the one before, modulo 65,536, as 0, -1, 1, -2, ... = 0, 1, 2, 3, ...",
    ),
    # landed pieces and marks
    ("piece", "SMALLINT", "", "Number of the gap-free stretch within the delivery, from 0."),
    ("arrival_number", "INTEGER", "", "Order in which the deliveries of a device were accepted, from 0."),
    ("start_local", "TIMESTAMP", "", "First instant by the device's wall clock, NULL when the file has none."),
    ("start_resolution_ms", "INTEGER", "ms", "Resolution of the file's start."),
    ("file_zone", "VARCHAR", "", "Zone of start_local when the file or the site's settings say it."),
    ("offset_ns", "BIGINT", "ns", "Time from the first instant of the delivery."),
    ("end_offset_ns", "BIGINT", "ns", "End by the device's own stamps, from the first instant; NULL without stamps."),
    ("rate_numerator", "BIGINT", "samples", "Sampling rate as an exact fraction: numerator."),
    ("rate_denominator", "BIGINT", "s", "Sampling rate as an exact fraction: denominator."),
    ("mark_utc", "TIMESTAMP", "UTC", "Instant of a mark of the file: patient button or diary."),
    ("mark_text", "VARCHAR", "", "Text of the mark; words of the person's name in the same file are masked."),
    # beats
    ("sample", "BIGINT", "samples", "Index of the R peak within its segment, from 0."),
    ("beat_utc", "TIMESTAMP", "UTC", "Instant of the R peak."),
    ("rr_before_ms", "REAL", "ms", "Time since the beat before, NULL after a gap."),
    ("rr_after_ms", "REAL", "ms", "Time to the beat after, NULL before a gap."),
    (
        "beat_class",
        "VARCHAR",
        "",
        "N normal, S supraventricular ectopic, V ventricular ectopic, F fusion, Q unclassifiable.",
    ),
    ("class_probability", "REAL", "", "Estimated probability that the class is right."),
    ("family", "SMALLINT", "", "Number of the shape family within the recording, -1 for none."),
    ("qrs_width_ms", "REAL", "ms", "QRS width of the beat or the family's averaged beat."),
    ("amplitude_mv", "REAL", "mV", "R amplitude against the local baseline, signed."),
    ("polarity", "TINYINT", "", "1 upright, -1 inverted main deflection."),
    ("coupling_ms", "REAL", "ms", "Coupling interval of a premature beat, NULL for others."),
    (
        "prematurity_pct",
        "REAL",
        "%",
        "How much earlier than expected from the local normal interval; negative is late.",
    ),
    ("pause_kind", "VARCHAR", "", "Pause after an ectopic beat: full, reset or interpolated; NULL when none applies."),
    ("r_on_t_index", "REAL", "", "Coupling interval over the estimated QT interval; small values lie on the T wave."),
    ("is_escape", "BOOLEAN", "", "Late ventricular beat that ends a pause; it is not premature."),
    ("is_analysable", "BOOLEAN", "", "The beat lies in analysable time and counts in numerator and denominator."),
    # families
    ("family_class", "VARCHAR", "", "Class that most beats of the family carry."),
    ("beat_count", "BIGINT", "beats", "Number of beats."),
    ("share_pct", "DOUBLE", "%", "Share of the recording's analysable beats."),
    ("shape_mv", "REAL[]", "mV", "Averaged beat from 280 ms before to 440 ms after the R peak, 125 values a second."),
    ("mean_coupling_ms", "REAL", "ms", "Mean coupling interval of the family's premature beats."),
    ("coupling_spread_ms", "REAL", "ms", "90th minus 10th percentile of the coupling interval."),
    ("patient_family", "SMALLINT", "", "Number of the shape family over all recordings of the patient, from 0."),
    (
        "likeness",
        "REAL",
        "",
        "Correlation with the patient's family as it was before; NULL for the first of its shape.",
    ),
    ("share_of_day_pct", "DOUBLE", "%", "Share of the recording's analysable beats of that local day."),
    # episodes
    ("is_automatic", "BOOLEAN", "", "The episode follows from the classes found automatically."),
    (
        "is_counted",
        "BOOLEAN",
        "",
        "The episode follows from the classes that hold after over-reading and no reader's decision leaves it out.",
    ),
    ("episode_kind", "VARCHAR", "", "couplet, run, sv_run, bigeminy, trigeminy, pause or irregular."),
    ("first_sample", "BIGINT", "samples", "First sample within the segment."),
    ("last_sample", "BIGINT", "samples", "Last sample within the segment."),
    ("duration_s", "DOUBLE", "s", "Length in seconds."),
    ("rate_bpm", "REAL", "1/min", "Mean rate of the beats of the episode."),
    # quality
    ("quality_reason", "VARCHAR", "", "Why the window is not analysable: flat, rail, noise, lead_off or missing."),
    # findings
    (
        "finding_code",
        "VARCHAR",
        "",
        "Code of something about the whole recording that a reader of its numbers must know.",
    ),
    ("finding_detail", "VARCHAR", "", "The finding in one sentence with its figures."),
    # tallies
    ("quarter_utc", "TIMESTAMP", "UTC", "Start of the quarter of an hour."),
    ("hour_utc", "TIMESTAMP", "UTC", "Start of the hour."),
    ("local_day", "DATE", "", "Calendar day at the patient's place."),
    ("clock_hour", "SMALLINT", "h", "Hour of the day at the patient's place, 0 to 23."),
    ("day_h", "DOUBLE", "h", "Length of the local calendar day: 23, 24 or 25 hours."),
    ("n_beats", "BIGINT", "beats", "Analysable beats of class N."),
    ("s_beats", "BIGINT", "beats", "Analysable beats of class S."),
    ("v_beats", "BIGINT", "beats", "Analysable beats of class V."),
    ("f_beats", "BIGINT", "beats", "Analysable beats of class F."),
    ("q_beats", "BIGINT", "beats", "Analysable beats of class Q."),
    ("all_beats", "BIGINT", "beats", "Analysable beats of all classes: the denominator of every burden."),
    ("rr_sum_s", "DOUBLE", "s", "Sum of the RR intervals that count for the mean rate."),
    ("rr_count", "BIGINT", "", "Number of RR intervals that count for the mean rate."),
    ("mean_rate_bpm", "DOUBLE", "1/min", "Mean heart rate: 60 over the mean RR interval between analysable beats."),
    ("couplets", "BIGINT", "", "Ventricular couplets that begin here."),
    ("runs", "BIGINT", "", "Ventricular runs of three or more beats that begin here."),
    ("sv_runs", "BIGINT", "", "Supraventricular runs of three or more beats that begin here."),
    ("pauses", "BIGINT", "", "Pauses that begin here."),
    ("longest_run_beats", "BIGINT", "beats", "Beats of the longest ventricular run."),
    ("fastest_run_bpm", "REAL", "1/min", "Rate of the fastest ventricular run."),
    ("longest_pause_ms", "REAL", "ms", "Longest pause."),
    ("bigeminy_s", "DOUBLE", "s", "Seconds in ventricular bigeminy."),
    ("trigeminy_s", "DOUBLE", "s", "Seconds in ventricular trigeminy."),
    ("irregular_s", "DOUBLE", "s", "Seconds of irregular rhythm that looks like atrial fibrillation (context only)."),
    ("v_burden_pct", "DOUBLE", "%", "Ventricular ectopic beats per 100 analysable beats (fusion beats not counted)."),
    (
        "v_burden_low_pct",
        "DOUBLE",
        "%",
        "Lower end of the 95 % interval of the day's burden from its clock hours and their waves, not from other days.",
    ),
    ("v_burden_high_pct", "DOUBLE", "%", "Upper end of that interval; NULL with beats in fewer than 3 clock hours."),
    ("s_burden_pct", "DOUBLE", "%", "Supraventricular ectopic beats per 100 analysable beats."),
    ("v_per_h", "DOUBLE", "1/h", "Ventricular ectopic beats per analysable hour."),
    ("clock_hours_covered", "SMALLINT", "h", "Clock hours with at least 15 analysable minutes."),
    ("is_valid_day", "BOOLEAN", "", "The day has at least the programme's minimum of analysable hours."),
    # therapies, periods, changes
    ("therapy_kind", "VARCHAR", "", "medication_start, medication_stop, dose_change, ablation or other."),
    ("therapy_detail", "VARCHAR", "", "Substance and dose, or the procedure, as written in the register."),
    ("therapy_day", "DATE", "", "Local day of the therapy event."),
    ("period", "VARCHAR", "", "baseline, settling or after."),
    ("first_day", "DATE", "", "First local day of the span."),
    ("last_day", "DATE", "", "Last local day of the span."),
    ("wear_days", "BIGINT", "d", "Days with any wear."),
    ("valid_days", "BIGINT", "d", "Days that reach the minimum of analysable hours."),
    ("clock_coverage_pct", "DOUBLE", "%", "Share of the 24 clock hours with analysable time in the span."),
    ("measure", "VARCHAR", "", "What is compared, such as v_burden_pct, runs_per_24h or mean_rate_bpm."),
    (
        "baseline_value",
        "DOUBLE",
        "as the measure",
        "Value before the therapy event: a typical day, standardised over clock hours; of runs the largest.",
    ),
    (
        "after_value",
        "DOUBLE",
        "as the measure",
        "Value after the settling time: a typical day, standardised over clock hours; of runs the largest.",
    ),
    ("baseline_days", "BIGINT", "d", "Valid days used before the therapy event."),
    ("after_days", "BIGINT", "d", "Valid days used after the settling time."),
    ("baseline_analysable_h", "DOUBLE", "h", "Analysable hours used before."),
    ("after_analysable_h", "DOUBLE", "h", "Analysable hours used after."),
    ("baseline_clock_coverage_pct", "DOUBLE", "%", "Share of the 24 clock hours covered before."),
    ("after_clock_coverage_pct", "DOUBLE", "%", "Share of the 24 clock hours covered after."),
    ("baseline_rate_bpm", "DOUBLE", "1/min", "Mean heart rate before."),
    ("after_rate_bpm", "DOUBLE", "1/min", "Mean heart rate after."),
    ("ratio", "DOUBLE", "", "After over baseline; NULL for the longest and fastest run, whose days are ranked."),
    ("ratio_low", "DOUBLE", "", "Lower end of the 95 % interval of the ratio."),
    ("ratio_high", "DOUBLE", "", "Upper end of the 95 % interval of the ratio."),
    ("change_pct", "DOUBLE", "%", "100 x (ratio - 1)."),
    (
        "chance_fall_limit_pct",
        "DOUBLE",
        "%",
        "Smallest fall that spontaneous variation would not explain, one-sided 95 %.",
    ),
    (
        "chance_rise_limit_pct",
        "DOUBLE",
        "%",
        "Smallest rise that spontaneous variation would not explain, one-sided 95 %.",
    ),
    (
        "success_probability_pct",
        "DOUBLE",
        "%",
        "Probability that the true reduction exceeds the programme's success limit.",
    ),
    ("counting_share_pct", "DOUBLE", "%", "Share of the variance of the log ratio that comes from counting beats."),
    ("day_share_pct", "DOUBLE", "%", "Share that comes from variation between days."),
    ("gap_share_pct", "DOUBLE", "%", "Share that comes from the time between the periods."),
    (
        "detection_share_pct",
        "DOUBLE",
        "%",
        "Share from what the detector does differently in two periods of one patient.",
    ),
    ("variance_source", "VARCHAR", "", "Where the day-to-day variance came from: patient, programme or both."),
    (
        "day_sd_ln",
        "DOUBLE",
        "",
        "SD of the natural logarithm of the level between days, as used for the chance limits.",
    ),
    (
        "days_to_settle",
        "BIGINT",
        "d",
        "More wear days after that would put the same ratio beyond chance, if any would.",
    ),
    ("expected_regression_pct", "DOUBLE", "%", "Fall that regression to the mean brings if the baseline was chosen."),
    ("recurrence_day", "DATE", "", "First day on which the burden is back beyond chance after it had fallen."),
    (
        "dependence",
        "VARCHAR",
        "",
        "Ectopy against heart rate by the hour: follows_rate, opposes_rate, independent, unknown.",
    ),
    ("hourly_r", "DOUBLE", "", "Correlation of ventricular beats per hour with the mean heart rate, baseline hours."),
    ("rate_change_pct", "DOUBLE", "%", "Change of the mean heart rate from baseline to after."),
    (
        "expected_from_rate_pct",
        "DOUBLE",
        "%",
        "Change of ectopy that goes with such a change untreated; NULL out of range.",
    ),
    ("equal_rate_ratio", "DOUBLE", "", "After over baseline of ventricular beats per hour at equal heart rate."),
    ("equal_rate_ratio_low", "DOUBLE", "", "Lower end of the 95 % interval of that ratio."),
    ("equal_rate_ratio_high", "DOUBLE", "", "Upper end of the 95 % interval of that ratio."),
    ("step_ratio", "DOUBLE", "", "Ventricular beats per hour at the end of the settling time over the trend before."),
    ("step_ratio_low", "DOUBLE", "", "Lower end of its 95 % interval, wider where days resemble the day before."),
    ("step_ratio_high", "DOUBLE", "", "Upper end of its 95 % interval, wider where days resemble the day before."),
    ("slope_ratio_per_week", "DOUBLE", "", "Factor by which each later week differs from the trend before."),
    ("slope_ratio_per_week_low", "DOUBLE", "", "Lower end of its 95 % interval."),
    ("slope_ratio_per_week_high", "DOUBLE", "", "Upper end of its 95 % interval."),
    ("dispersion", "DOUBLE", "", "Variance of the daily counts over their mean, 1 where only counting scatters them."),
    ("level_before", "DOUBLE", "%", "Ventricular burden of a typical day before the shift."),
    ("level_after", "DOUBLE", "%", "Ventricular burden of a typical day from the shift on."),
    ("limit_pct", "DOUBLE", "%", "Fall that counts as response."),
    ("patients", "BIGINT", "", "Patients with a therapy event of the kind; the first one counts."),
    ("evaluable_patients", "BIGINT", "", "Of these, patients with enough wear on both sides and ectopy before."),
    ("fell_patients", "BIGINT", "", "Patients whose measure fell beyond chance."),
    ("rose_patients", "BIGINT", "", "Patients whose measure rose beyond chance."),
    ("responders", "BIGINT", "", "Evaluable patients whose measure fell by at least the limit."),
    ("responder_pct", "DOUBLE", "%", "Responders among the evaluable patients."),
    ("responder_pct_low", "DOUBLE", "%", "Lower end of its 95 % interval (Wilson)."),
    ("responder_pct_high", "DOUBLE", "%", "Upper end of its 95 % interval (Wilson)."),
    ("mean_ratio", "DOUBLE", "", "Geometric mean of after over baseline, half a beat standing for none."),
    ("mean_ratio_low", "DOUBLE", "", "Lower end of the 95 % interval of the mean ratio."),
    ("mean_ratio_high", "DOUBLE", "", "Upper end of the 95 % interval of the mean ratio."),
    ("visit", "VARCHAR", "", "Name of the planned visit, as in the register."),
    (
        "arm",
        "VARCHAR",
        "",
        "Arm of the trial; masked unless the settings give a reason to show it, NULL or none without one.",
    ),
    ("target_day", "DATE", "", "Local day for which the visit is planned."),
    ("meets_protocol", "BOOLEAN", "", "The visit has the days and analysable hours that the trial's settings ask for."),
    ("verdict", "VARCHAR", "", "fell_beyond_chance, rose_beyond_chance, within_chance or too_little_wear."),
    # attention, reviews, runs
    ("attention_code", "VARCHAR", "", "Reason code of the attention list."),
    ("attention_reason", "VARCHAR", "", "Why the patient needs a look, in one sentence with its figures."),
    ("since_day", "DATE", "", "Local day since when the reason holds."),
    ("attention_rank", "INTEGER", "", "Order on the attention list, 1 first."),
    ("decision_order", "INTEGER", "", "Place of the decision within its file, from 0."),
    ("read_fingerprint", "VARCHAR", "", "Fingerprint of the analysis that the over-reader saw."),
    (
        "decision_subject",
        "VARCHAR",
        "",
        "What was decided: family, part (beats of a family found as one class), beat, episode, or note for a remark.",
    ),
    ("automatic_class", "VARCHAR", "", "Class found automatically when the decision was taken."),
    ("same_as_family", "SMALLINT", "", "Family that has the same shape in the reader's eyes."),
    ("is_mixed", "BOOLEAN", "", "The family holds different beats in the reader's eyes and is split."),
    ("note", "VARCHAR", "", "Remark of the reader."),
    ("reader_codes", "VARCHAR", "", "Codes of all readers, separated by blanks."),
    ("decided_beats", "BIGINT", "beats", "Analysable beats whose class an over-reader decided; the counts hold it."),
    ("unmet_decisions", "BIGINT", "", "Decided beats, runs and pauses that the published analysis does not have."),
    ("part_class", "VARCHAR", "", "Class found automatically that marks a part of a split family; NULL for the whole."),
    (
        "rejected_episodes",
        "BIGINT",
        "",
        "Runs and pauses that their readers reject; counts of runs and pauses hold it.",
    ),
    (
        "decided_class",
        "VARCHAR",
        "",
        "What over-readers decided for more than half of the family's beats, NULL for none.",
    ),
    ("automatic_couplets", "BIGINT", "", "Ventricular couplets found automatically, before any decision."),
    ("automatic_runs", "BIGINT", "", "Ventricular runs found automatically, before any decision."),
    ("undecided_families", "BIGINT", "", "Shape families that a reader split and of which something is undecided."),
    ("undecided_v_beats", "BIGINT", "beats", "Analysable V beats of such a family on which nothing is decided."),
    ("undecided_other_beats", "BIGINT", "beats", "Its analysable beats of other classes on which nothing is decided."),
    ("v_burden_least_pct", "DOUBLE", "%", "Ventricular burden if no undecided beat of such families were V."),
    ("v_burden_most_pct", "DOUBLE", "%", "Ventricular burden if every undecided beat of such families were V."),
    (
        "decisions_to_goal",
        "BIGINT",
        "",
        "Decisions on families, in the order of the sheet, that settle 95 % of the burden.",
    ),
    (
        "seconds_per_decision",
        "SMALLINT",
        "s",
        "Time that a decision is taken to need: a shape and two strips to look at. Common practice, no source.",
    ),
    ("minutes_to_goal", "DOUBLE", "min", "Decisions to the goal times the time that a decision is taken to need."),
    ("automatic_v_beats", "BIGINT", "beats", "Analysable beats found as V automatically, before any decision."),
    ("automatic_all_beats", "BIGINT", "beats", "Analysable beats found automatically, before any decision."),
    ("automatic_v_burden_pct", "DOUBLE", "%", "Ventricular burden found automatically, before any decision."),
    ("decided_v_pct", "DOUBLE", "%", "Share of the beats found as V automatically that a decision meets."),
    ("other_reader_code", "VARCHAR", "", "Code of the other reader."),
    ("other_decision", "VARCHAR", "", "What the other reader decided."),
    ("beats_in_common", "BIGINT", "beats", "Beats that both readers decided."),
    ("agreed_pct", "DOUBLE", "%", "Share of the beats in common on whose class both agree."),
    ("kappa", "DOUBLE", "", "Cohen's kappa over the beats in common; NULL when both used one class only."),
    (
        "review_rank",
        "BIGINT",
        "",
        "Place on the over-read sheet: the decision that can move the burden most comes first.",
    ),
    (
        "v_share_pct",
        "DOUBLE",
        "%",
        "Share of the beats in ventricular families that a decision on this family settles.",
    ),
    ("settled_pct", "DOUBLE", "%", "Share that is settled once this family and all before it are decided."),
    ("reader_code", "VARCHAR", "", "Code of the person who over-read."),
    ("reviewed_utc", "TIMESTAMP", "UTC", "Instant of the review."),
    (
        "decision",
        "VARCHAR",
        "",
        "What the reader decided: accept, a class, noise, reject, or withdraw for no word any more.",
    ),
    ("run_id", "VARCHAR", "", "Code of one run of the nightly flow."),
    ("finished_utc", "TIMESTAMP", "UTC", "Instant at which the run ended."),
    ("accepted_count", "BIGINT", "", "Deliveries accepted in the run."),
    ("waiting_count", "BIGINT", "", "Deliveries that wait."),
    ("skipped_count", "BIGINT", "", "Deliveries skipped in the run."),
    ("quarantined_count", "BIGINT", "", "Deliveries quarantined in the run."),
    ("outcome", "VARCHAR", "", "published, published_with_refusals or not_published."),
    ("detector_version", "VARCHAR", "", "Version of the detector."),
    ("settings_json", "VARCHAR", "", "Settings that change results, as JSON."),
    ("is_published", "BOOLEAN", "", "This fingerprint is the one that the trend tables show."),
    # strips
    ("strip_reason", "VARCHAR", "", "Rule by which the strip was chosen."),
    ("samples_mv", "REAL[]", "mV", "Samples of the strip."),
    ("beat_samples", "BIGINT[]", "samples", "R peaks within the strip, from its first sample."),
    ("beat_classes", "VARCHAR[]", "", "Classes of those beats."),
    ("beat_families", "BIGINT[]", "", "Families of those beats, -1 for none."),
    # inputs and audit
    ("input_file", "VARCHAR", "", "Register file or settings file."),
    ("input_row", "VARCHAR", "", "What identifies the row within its file, or the section of the settings."),
    ("input_column", "VARCHAR", "", "Column of the register file, or name of the setting."),
    ("input_value", "VARCHAR", "", "Value as written, NULL for a blank."),
    ("change_id", "VARCHAR", "", "Code of one change that can move a number."),
    ("happened_utc", "TIMESTAMP", "UTC", "Instant at which the change was made or noticed."),
    ("actor_code", "VARCHAR", "", "Code of the person or account that made the change, NULL when nobody is known."),
    ("change_kind", "VARCHAR", "", "register, settings, delivery, review, promotion or cut."),
    ("subject", "VARCHAR", "", "What was changed: file, row and column; a delivery; a beat; a fingerprint; a cut."),
    ("old_value", "VARCHAR", "", "Value before, NULL when there was none."),
    ("new_value", "VARCHAR", "", "Value after, NULL when it was taken away."),
    # parts
    ("part_key", "VARCHAR", "", "Load that the part belongs to: a recording, a delivery, a run or a fingerprint."),
    ("part_path", "VARCHAR", "", "Path of the part's file, relative to the lake."),
    ("part_sha256", "VARCHAR", "", "SHA-256 of the part's bytes."),
    ("part_rows", "BIGINT", "", "Rows of the part."),
    ("part_bytes", "BIGINT", "bytes", "Size of the part's file."),
    # dictionary
    ("table_name", "VARCHAR", "", "Name of a table of the publication or, for a part, of the lake."),
    ("column_name", "VARCHAR", "", "Name of a column."),
    ("column_type", "VARCHAR", "", "DuckDB type of the column."),
    ("unit", "VARCHAR", "", "Unit of the column."),
    ("meaning", "VARCHAR", "", "Meaning of the column."),
    ("grain", "VARCHAR", "", "What one row of the table is."),
)


def _tables(*tables: Table) -> dict[str, Table]:
    for table in tables:
        unknown = [name for name in (*table.key, *table.columns) if name not in COLUMNS]
        if unknown or not set(table.key) <= set(table.columns):
            raise ValueError(f"table {table.name}: columns {unknown} are not in the dictionary, or its key is not")
    return {table.name: table for table in tables}


_CLASS_COUNTS = ("n_beats", "s_beats", "v_beats", "f_beats", "q_beats")
_COUNTS = (*_CLASS_COUNTS, "all_beats")
_RHYTHM = (
    "couplets", "runs", "sv_runs", "pauses", "longest_run_beats", "fastest_run_bpm", "longest_pause_ms",
    "bigeminy_s", "trigeminy_s", "irregular_s",
)  # fmt: skip
_DELIVERY = (
    "delivery_id", "file_name", "file_bytes", "content_sha256", "received_utc", "status", "code", "reason",
    "format", "findings", "recording_id", "start_local", "signal_sha256",
)  # fmt: skip
_RECORDING = (
    "recording_id", "device_serial", "start_utc", "end_utc", "zone", "zone_source", "fs_hz", "lead", "mv_per_count",
    "count_at_zero_mv", "rail_low_count", "rail_high_count", "missing_count", "segment_count", "sample_count",
    "recorded_h", "findings",
)  # fmt: skip

# Tables of the lake: parts land here, keyed by recording or by run, and are never changed in place.
LAKE: dict[str, Table] = _tables(
    Table("deliveries", "one row per file set that arrived", ("delivery_id",), _DELIVERY),
    Table("recordings", "one row per wearing of one patch", ("recording_id",), _RECORDING),
    Table(
        "segments", "one row per gap-free stretch of a recording", ("recording_id", "segment"),
        ("recording_id", "segment", "start_utc", "end_utc", "sample_count", "delivery_id"),
    ),
    Table(
        "pieces",
        "one row per landed block of samples of an accepted delivery",
        ("delivery_id", "piece", "block"),
        (
            "delivery_id",
            "piece",
            "block",
            "device_serial",
            "arrival_number",
            "start_local",
            "start_resolution_ms",
            "file_zone",
            "offset_ns",
            "end_offset_ns",
            "sample_count",
            "rate_numerator",
            "rate_denominator",
            "lead",
            "mv_per_count",
            "count_at_zero_mv",
            "rail_low_count",
            "rail_high_count",
            "missing_count",
            "findings",
            "part_path",
            "part_sha256",
            "part_bytes",
        ),
    ),
    Table(
        "delivered_marks",
        "one row per patient button or diary mark in an accepted delivery",
        (),
        ("delivery_id", "offset_ns", "duration_s", "mark_text"),
    ),
    Table(
        "marks",
        "one row per patient button or diary mark in a recording",
        (),
        ("recording_id", "delivery_id", "mark_utc", "duration_s", "mark_text"),
    ),
    Table(
        "signal", "one row per sample, one part per block of a segment", (),
        ("step",),
    ),
    Table(
        "beats", "one row per detected QRS", ("recording_id", "segment", "sample"),
        ("recording_id", "fingerprint", "segment", "sample", "beat_utc", "rr_before_ms", "rr_after_ms", "beat_class",
         "class_probability", "family", "qrs_width_ms", "amplitude_mv", "polarity", "coupling_ms", "prematurity_pct",
         "pause_kind", "r_on_t_index", "is_escape", "is_analysable"),
    ),
    Table(
        "families", "one row per shape family of a recording", ("recording_id", "family"),
        ("recording_id", "fingerprint", "family", "family_class", "beat_count", "share_pct", "qrs_width_ms",
         "amplitude_mv", "mean_coupling_ms", "coupling_spread_ms", "shape_mv"),
    ),
    Table(
        "family_quarters", "one row per shape family and quarter of a UTC hour with analysable beats of it",
        ("recording_id", "family", "quarter_utc"),
        ("recording_id", "fingerprint", "family", "quarter_utc", "beat_count", *_CLASS_COUNTS),
    ),
    Table(
        "episodes", "one row per couplet, run, bigeminy or trigeminy stretch, pause or irregular stretch",
        ("recording_id", "episode_kind", "segment", "first_sample"),
        ("recording_id", "fingerprint", "episode_kind", "segment", "first_sample", "last_sample", "start_utc", "end_utc",
         "beat_count", "duration_s", "rate_bpm"),
    ),
    Table(
        "quality_windows", "one row per stretch that is not analysable", ("recording_id", "segment", "first_sample"),
        ("recording_id", "fingerprint", "segment", "first_sample", "last_sample", "start_utc", "end_utc", "duration_s",
         "quality_reason"),
    ),
    Table(
        "findings", "one row per recording and finding of the detector", ("recording_id", "finding_code"),
        ("recording_id", "fingerprint", "finding_code", "finding_detail"),
    ),
    Table(
        "quarter_hours", "one row per recording and quarter of a UTC hour that holds samples",
        ("recording_id", "quarter_utc"),
        ("recording_id", "fingerprint", "quarter_utc", "recorded_s", "worn_s", "analysable_s", *_COUNTS, "rr_sum_s",
         "rr_count", *_RHYTHM),
    ),
    Table(
        "strips", "one row per ECG strip kept for the pages", ("recording_id", "segment", "first_sample"),
        ("recording_id", "fingerprint", "segment", "first_sample", "start_utc", "fs_hz", "strip_reason", "beat_class",
         "samples_mv", "beat_samples", "beat_classes", "beat_families"),
    ),
    Table(
        "fingerprints", "one row per detector version and result settings that made beats", ("fingerprint",),
        ("fingerprint", "detector_version", "settings_json"),
    ),
    Table(
        "decisions", "one row per decision in an over-reader's file", ("delivery_id", "decision_order"),
        ("delivery_id", "decision_order", "recording_id", "read_fingerprint", "reader_code", "reviewed_utc",
         "decision_subject", "family", "segment", "sample", "start_utc", "episode_kind", "automatic_class", "beat_count",
         "decision", "same_as_family", "is_mixed", "note"),
    ),
    Table(
        "reviews", "one row per beat whose class an over-reader's file decides; accepted normal beats are left out",
        ("delivery_id", "segment", "sample"),
        ("delivery_id", "recording_id", "read_fingerprint", "segment", "sample", "beat_utc", "reader_code",
         "reviewed_utc", "automatic_class", "decision"),
    ),
    Table(
        "inputs", "one row per value of the register files and the settings, as last seen",
        ("input_file", "input_row", "input_column"),
        ("input_file", "input_row", "input_column", "input_value"),
    ),
    Table(
        "audit", "one row per change of register or settings, promotion or cut", ("change_id",),
        ("change_id", "happened_utc", "actor_code", "change_kind", "subject", "old_value", "new_value", "reason"),
    ),
    Table(
        "runs_of_flow", "one row per run of the nightly flow that had something to do", ("run_id",),
        ("run_id", "finished_utc", "accepted_count", "waiting_count", "skipped_count", "quarantined_count", "outcome"),
    ),
)  # fmt: skip

OF_PATIENT = (
    "recordings", "segments", "families", "patient_families", "family_days", "episodes", "findings", "marks", "hours",
    "local_hours", "wear_days", "periods", "review_sheet", "undecided_families", "unmet_decisions", "reviewed",
)  # fmt: skip
"""Published tables that follow patient by patient: a row belongs to one patient and follows from no other's data."""

SLICED = ("hours", "local_hours", "family_days", "episodes")
"""The large ones among them: a folder of Parquet files, each with the rows of a group of patients."""

# Tables of a publication, in the order in which a reader of the database meets them.
PUBLISHED: dict[str, Table] = _tables(
    Table("patients", "one row per patient of the register", ("patient_code",), ("patient_code", "zone")),
    Table("deliveries", "one row per file set that arrived", ("delivery_id",), _DELIVERY),
    Table(
        "recordings", "one row per wearing of one patch", ("recording_id",),
        ("recording_id", "patient_code", *_RECORDING[1:], "worn_h", "analysable_h", "all_beats", "v_beats",
         "v_burden_pct", "decided_beats", "fingerprint"),
    ),
    LAKE["segments"],
    LAKE["beats"],
    Table(
        "families", "one row per shape family of a recording", ("recording_id", "family"),
        (*LAKE["families"].columns, "decided_class"),
    ),
    Table(
        "patient_families", "one row per shape family of at least 10 beats, matched across the patient's recordings",
        ("recording_id", "family"),
        ("recording_id", "patient_code", "family", "patient_family", "family_class", "beat_count", "likeness"),
    ),
    Table(
        "family_days", "one row per recording, shape family and local day with analysable beats of it",
        ("recording_id", "family", "local_day"),
        ("recording_id", "patient_code", "family", "local_day", "beat_count", "share_of_day_pct"),
    ),
    Table(
        "episodes", "one row per episode, found automatically or by the classes that over-readers decided",
        ("recording_id", "episode_kind", "segment", "first_sample", "last_sample"),
        (*LAKE["episodes"].columns, "is_automatic", "is_counted"),
    ),
    LAKE["quality_windows"],
    LAKE["findings"],
    Table(
        "marks", "one row per patient button or diary mark, recording and instant",
        ("recording_id", "mark_utc", "mark_text"),
        ("recording_id", "patient_code", "mark_utc", "mark_text", "duration_s"),
    ),
    LAKE["strips"],
    Table(
        "hours", "one row per recording and UTC hour", ("recording_id", "hour_utc"),
        ("recording_id", "patient_code", "hour_utc", "recorded_s", "worn_s", "analysable_s", *_COUNTS, "mean_rate_bpm",
         *_RHYTHM),
    ),
    Table(
        "local_hours", "one row per patient, local day and clock hour with wear",
        ("patient_code", "local_day", "clock_hour"),
        ("patient_code", "local_day", "clock_hour", "worn_s", "analysable_s", *_COUNTS, "mean_rate_bpm", "couplets",
         "runs", "longest_run_beats", "fastest_run_bpm", "bigeminy_s", "v_burden_pct", "v_per_h"),
    ),
    Table(
        "wear_days", "one row per patient and local calendar day with wear", ("patient_code", "local_day"),
        ("patient_code", "local_day", "day_h", "recorded_h", "worn_h", "analysable_h", "clock_hours_covered",
         "is_valid_day", *_COUNTS, "decided_beats", "v_burden_pct", "v_burden_low_pct", "v_burden_high_pct",
         "s_burden_pct", "v_per_h", "mean_rate_bpm", *_RHYTHM),
    ),
    Table(
        "therapies", "one row per therapy event of the register", ("therapy_id",),
        ("therapy_id", "patient_code", "therapy_kind", "therapy_detail", "therapy_day"),
    ),
    Table(
        "periods", "one row per patient, therapy event and period", ("patient_code", "therapy_id", "period"),
        ("patient_code", "therapy_id", "period", "first_day", "last_day", "wear_days", "valid_days", "worn_h",
         "analysable_h", "clock_coverage_pct", "all_beats", "v_beats", "s_beats", "v_burden_pct", "s_burden_pct",
         "v_per_h", "mean_rate_bpm"),
    ),
    Table(
        "changes", "one row per patient, therapy event and measure", ("patient_code", "therapy_id", "measure"),
        ("patient_code", "therapy_id", "measure", "baseline_value", "after_value", "baseline_days", "after_days",
         "baseline_analysable_h", "after_analysable_h", "baseline_clock_coverage_pct", "after_clock_coverage_pct",
         "baseline_rate_bpm", "after_rate_bpm", "ratio", "ratio_low", "ratio_high", "change_pct",
         "chance_fall_limit_pct", "chance_rise_limit_pct", "success_probability_pct", "day_sd_ln", "variance_source",
         "counting_share_pct", "day_share_pct", "gap_share_pct", "detection_share_pct",
         "days_to_settle", "expected_regression_pct", "recurrence_day", "verdict", "reason"),
    ),
    Table(
        "rate_effects", "one row per patient and therapy event", ("patient_code", "therapy_id"),
        ("patient_code", "therapy_id", "dependence", "hourly_r", "rate_change_pct", "expected_from_rate_pct", "ratio",
         "equal_rate_ratio", "equal_rate_ratio_low", "equal_rate_ratio_high", "reason"),
    ),
    Table(
        "series_fits", "one row per patient and therapy event", ("patient_code", "therapy_id"),
        ("patient_code", "therapy_id", "step_ratio", "step_ratio_low", "step_ratio_high", "slope_ratio_per_week",
         "slope_ratio_per_week_low", "slope_ratio_per_week_high", "dispersion"),
    ),
    Table(
        "visits", "one row per patient and planned visit of a trial", ("patient_code", "visit"),
        ("patient_code", "visit", "arm", "target_day", "first_day", "last_day", "wear_days", "valid_days",
         "analysable_h", "v_beats", "s_beats", "all_beats", "v_burden_pct", "s_burden_pct", "v_per_h",
         "meets_protocol", "reason"),
    ),
    Table(
        "visit_changes", "one row per patient, later visit of a trial and measure", ("patient_code", "visit", "measure"),
        ("patient_code", "visit", "arm", "measure", "baseline_value", "after_value", "baseline_days", "after_days",
         "ratio", "ratio_low", "ratio_high", "change_pct", "chance_fall_limit_pct", "chance_rise_limit_pct",
         "success_probability_pct", "verdict", "reason"),
    ),
    Table(
        "rate_by_clock_hour", "one row per patient, therapy event and hour of the day with a heart rate",
        ("patient_code", "therapy_id", "clock_hour"),
        ("patient_code", "therapy_id", "clock_hour", "baseline_rate_bpm", "after_rate_bpm", "baseline_analysable_h",
         "after_analysable_h"),
    ),
    Table(
        "responders", "one row per later visit of a trial, arm, measure and limit of response",
        ("visit", "arm", "measure", "limit_pct"),
        ("visit", "arm", "measure", "limit_pct", "patients", "evaluable_patients", "fell_patients", "rose_patients",
         "responders", "responder_pct", "responder_pct_low", "responder_pct_high", "mean_ratio", "mean_ratio_low",
         "mean_ratio_high"),
    ),
    Table(
        "level_shifts", "one row per patient and day on which the ventricular burden moved to another level",
        ("patient_code", "local_day"),
        ("patient_code", "local_day", "level_before", "level_after"),
    ),
    Table(
        "cohort", "one row per therapy kind, measure and limit of response", ("therapy_kind", "measure", "limit_pct"),
        ("therapy_kind", "measure", "limit_pct", "patients", "evaluable_patients", "fell_patients", "rose_patients",
         "responders", "responder_pct", "responder_pct_low", "responder_pct_high", "mean_ratio", "mean_ratio_low",
         "mean_ratio_high"),
    ),
    Table(
        "attention", "one row per patient and reason for a look", ("patient_code", "attention_code"),
        ("attention_rank", "patient_code", "attention_code", "attention_reason", "since_day"),
    ),
    Table(
        "review_sheet",
        "one row per recording and shape family with counted beats, in the order in which an over-reader decides",
        ("recording_id", "family"),
        ("recording_id", "review_rank", "family", "family_class", "beat_count", *_CLASS_COUNTS, "v_share_pct",
         "settled_pct"),
    ),
    LAKE["decisions"],
    LAKE["reviews"],
    Table(
        "reviewed", "one row per recording that an over-reader decided on", ("recording_id",),
        ("recording_id", "patient_code", "reader_codes", "decided_beats", "unmet_decisions", "rejected_episodes",
         "decided_v_pct", "automatic_v_beats", "automatic_all_beats", "automatic_v_burden_pct", "v_beats", "all_beats",
         "v_burden_pct", "automatic_couplets", "couplets", "automatic_runs", "runs", "undecided_families",
         "v_burden_least_pct", "v_burden_most_pct"),
    ),
    Table(
        "undecided_families", "one row per shape family that an over-reader split and of which something is undecided",
        ("recording_id", "family"),
        ("recording_id", "patient_code", "family", "reader_codes", "undecided_v_beats", "undecided_other_beats"),
    ),
    Table(
        "unmet_decisions", "one row per reader and decided beat, run or pause that the published analysis does not have",
        ("recording_id", "reader_code", "decision_subject", "start_utc", "episode_kind"),
        ("recording_id", "patient_code", "reader_code", "decision_subject", "start_utc", "episode_kind", "decision",
         "reviewed_utc", "delivery_id", "reason"),
    ),
    Table(
        "review_effort", "one row per recording with a ventricular family: what it takes to settle its burden",
        ("recording_id",),
        ("recording_id", "patient_code", "decisions_to_goal", "settled_pct", "seconds_per_decision", "minutes_to_goal",
         "decided_v_pct"),
    ),
    Table(
        "reader_conflicts", "one row per family, part of a family or beat that two readers decided differently",
        ("recording_id", "read_fingerprint", "decision_subject", "family", "part_class", "segment", "sample",
         "reader_code", "other_reader_code"),
        ("recording_id", "read_fingerprint", "decision_subject", "family", "part_class", "segment", "sample", "beat_count",
         "reader_code", "decision", "other_reader_code", "other_decision"),
    ),
    Table(
        "reader_agreement", "one row per pair of readers with beats in common", ("reader_code", "other_reader_code"),
        ("reader_code", "other_reader_code", "beats_in_common", "agreed_pct", "kappa"),
    ),
    LAKE["runs_of_flow"],
    Table(
        "audit", "one row per change that can move a number, deliveries and reviews among them", ("change_id",),
        LAKE["audit"].columns,
    ),
    Table(
        "fingerprints", "one row per detector version and result settings that made beats", ("fingerprint",),
        ("fingerprint", "detector_version", "settings_json", "is_published"),
    ),
    Table(
        "parts", "one row per part of the lake behind the publication", ("part_path",),
        ("table_name", "part_key", "part_path", "part_sha256", "part_rows", "part_bytes", "fingerprint", "segment",
         "block"),
    ),
    Table(
        "data_dictionary", "one row per published table and column", ("table_name", "column_name"),
        ("table_name", "grain", "column_name", "column_type", "unit", "meaning"),
    ),
)  # fmt: skip
