"""The one list of reason codes that ingest gives, and the two ways in which a reader declines a file.

A waiting delivery stays in the inbox, a refused one goes to quarantine, a finding rides on accepted data.
"""

from __future__ import annotations

WAITING = {
    "still_being_written": "the file is still growing or says that it is still being recorded",
    "waiting_for_missing_part": "a file that belongs to the delivery has not arrived",
    "wear_not_in_register": "register/wears.csv has no wear of this device at this time",
    "not_readable": "the file cannot be opened with the rights of this program",
    "no_space_left": "there is no room to copy the file into staging",
}

REFUSALS = {
    "empty_file": "the file has no bytes",
    "header_cut_short": "the file ends inside its header",
    "unknown_format": "no reader recognises the bytes",
    "format_not_supported": "the format is recognised but not read here",
    "pointer_not_data": "the file is a pointer to data that are elsewhere",
    "web_page_not_data": "the file is a web page, for example a login page",
    "archive_unsafe": "unpacking the archive would leave its limits or its folder",
    "damaged_archive": "the archive is cut or its checksum is wrong",
    "archive_holds_several": "the archive holds more than one recording",
    "no_signals": "the header lists no signals",
    "no_samples": "the file holds no samples",
    "no_ecg_channel": "no channel looks like an ECG",
    "several_ecg_channels": "several channels look like the ECG and none is named in the settings",
    "bad_header_number": "a number of the header cannot be read",
    "record_duration_not_positive": "the header's record duration is not positive",
    "sampling_rate_out_of_range": "the sampling rate is not one of an ECG",
    "amplitude_scale_missing": "the file does not say how many millivolts a count is",
    "digital_range_wrong": "the header's digital range is impossible",
    "unit_unknown": "the unit of the amplitude is not a voltage",
    "amplitude_not_plausible": "the amplitude scale cannot be that of an ECG",
    "start_time_unknown": "neither file nor register says when the recording began",
    "local_time_ambiguous": "the local start happened twice or never at a clock change",
    "time_runs_backwards": "a later piece of the file is stamped before the end of an earlier one",
    "no_time_in_record": "a piece of a discontinuous file has no time",
    "overlap_with_other_samples": "the file covers time that another accepted file fills with other samples",
    "same_samples_other_time": "the same samples were accepted with another start",
    "same_start_other_patient": "the file names another patient than the register's wear",
    "does_not_fit_recording": "rate, lead or scale differ from the other parts of the same wear",
    "file_name_points_outside": "a file name inside the delivery leads out of it",
    "samples_cut_short": "the file ended or broke while its samples were read",
    "part_missing": "a file that the header names is not there",
    "sample_coding_not_supported": "the coding of the samples is not read here",
    "text_layout_unclear": "columns, numbers or times of the text cannot be told without a site layout",
    "too_many_gaps": "the file has more gaps than segments can be numbered",
    "not_a_plain_file": "the inbox entry is a link, a pipe or a device",
    "decisions_unreadable": "the file of over-read decisions is not as the over-read sheet saves it",
    "decisions_of_other_version": "the file of over-read decisions was saved by another version",
    "decisions_do_not_fit": "the over-read decisions do not fit the analysis that is in force here",
    "reader_failed": "a reader failed in a way that is its own fault",
    "unsafe_xml": "the XML declares a document type or entities",
}

SKIPPED = {
    "same_content_again": "the same bytes were accepted before",
    "same_samples_other_header": "the same samples at the same time were accepted under another header",
}

FINDINGS = {
    "file_cut_short": "fewer samples than the header says",
    "record_count_open": "the header leaves the number of records open",
    "more_records_than_header_says": "more samples than the header says; all were read",
    "partial_last_record": "the incomplete last record was left out",
    "header_size_field_wrong": "the header's own size field is wrong; the true size was used",
    "checksum_wrong": "a checksum of the file does not match",
    "gap_in_file_declared_continuous": "the file says it has no gap, its times say otherwise",
    "bad_annotation": "an annotation could not be read and was left out",
    "saturated": "samples lie at the ends of the range",
    "flat": "all samples have one value",
    "clock_drift": "sample clock and time stamps run apart",
    "clock_not_changed": "the device clock did not follow a clock change; times come from the neighbour part",
    "overlap_trimmed": "samples that another part holds too were taken once",
    "resolution_reduced": "samples wider than 16 bit were stored in coarser steps",
    "rescaled_to_recording": "the part has another scale; its samples were put into that of the wear's first part",
    "missing_samples": "the file marks samples as missing",
    "start_from_register": "the file has no start, or its clock was never set; the register's was used",
    "device_from_file_name": "the file has no device serial; its name was used",
    "first_of_several_leads": "several leads are there; the first was taken",
    "channel_chosen_by_unit": "no channel is called ECG; the only voltage was taken",
    "scale_from_site": "the amplitude scale is the settings', not the file's",
    "zone_from_site": "the device clock's zone is the settings', not the file's",
}


class Declined(Exception):
    """A delivery is not taken now; `code` is from the lists above, the sentence says found, expected and what to do."""

    def __init__(self, code: str, sentence: str) -> None:
        super().__init__(sentence)
        self.code = code
        self.sentence = sentence


class Refused(Declined):
    """The delivery cannot be used as it is and goes to quarantine."""


class Waits(Declined):
    """The delivery may become usable without anyone changing it."""
