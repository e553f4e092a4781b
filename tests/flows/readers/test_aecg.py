"""HL7 aECG: streamed XML, hostile XML, time and scale."""

from fractions import Fraction

import numpy as np
import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery
from flows.readers.recording import Site

DOCUMENT = """<?xml version="1.0" encoding="UTF-8"?>{doctype}
<AnnotatedECG xmlns="urn:hl7-org:v3" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">
 <componentOf><timepointEvent><componentOf><subjectAssignment><subject><trialSubject><id extension="P-0001"/>
  <subjectDemographicPerson><name>Jane Doe</name><birthTime value="19510802"/></subjectDemographicPerson>
 </trialSubject></subject></subjectAssignment></componentOf></timepointEvent></componentOf>
 <component><series>
  <author><seriesAuthor><manufacturedSeriesDevice><id extension="SRL-1001"/></manufacturedSeriesDevice>
  </seriesAuthor></author>
  <component><sequenceSet>
   <component><sequence><code code="TIME_ABSOLUTE"/><value xsi:type="GLIST_TS">
    <head value="{head}"/><increment value="{increment}" unit="{step_unit}"/></value></sequence></component>
   {leads}
  </sequenceSet></component>
 </series></component>
</AnnotatedECG>"""
LEAD = """<component><sequence><code code="MDC_ECG_LEAD_{name}"/><value xsi:type="SLIST_PQ">
 <origin value="0" unit="uV"/><scale value="{scale}" unit="{unit}"/>
 <digits>{digits}</digits></value></sequence></component>"""
SIGNAL = np.round(900 * np.sin(np.arange(200_000) / 9)).astype(int)


@pytest.fixture
def opened(tmp_path):
    """Function that makes and opens a document."""

    def make(values=SIGNAL, *, names=("II",), doctype="", cut=None, site=Site(), **changes):
        fields = {
            "head": "20260301083000.250",
            "increment": "4",
            "step_unit": "ms",
            "scale": "2.5",
            "unit": "uV",
        } | changes
        digits = "\n".join(" ".join(map(str, values[a : a + 20])) for a in range(0, len(values), 20))
        leads = "".join(LEAD.format(name=name, digits=digits, **fields) for name in names)
        path = tmp_path / "a.xml"
        path.write_text(DOCUMENT.format(leads=leads, doctype=doctype, **fields)[:cut])
        return open_delivery([path], site)

    return make


def refused(opened, *args, **changes):
    with pytest.raises(Refused) as refusal:
        opened(*args, **changes)
    return refusal.value.code


def test_samples_rate_scale_and_start(opened):
    """Digits, increment, scale and head give samples, rate, millivolts and start; the name is not taken."""
    recording = opened()
    # Source: HL7 aECG Implementation Guide, final, 21 March 2005 (GLIST_TS, SLIST_PQ)
    assert np.array_equal(recording.read(0, 200_000), SIGNAL)
    assert recording.rate == Fraction(250)
    assert recording.mv_per_count == pytest.approx(0.0025)
    assert str(recording.start_local) == "2026-03-01 08:30:00.250000"
    assert (recording.lead, recording.zone) == ("II", None)
    assert (recording.device_words, recording.patient_words) == (("SRL-1001",), ("P-0001",))


def test_time_with_an_offset_is_an_instant(opened):
    """A head with an offset from UTC is read as the instant it is."""
    recording = opened(head="20260301083000.250+0130")
    assert (str(recording.start_local), recording.zone) == ("2026-03-01 07:00:00.250000", "UTC")


@pytest.mark.parametrize(
    "doctype",
    [
        "<!DOCTYPE AnnotatedECG>",
        '<!DOCTYPE a [<!ENTITY b "c">]>',
        '<!DOCTYPE a [<!ENTITY x SYSTEM "file:///etc/passwd">]>',
    ],
)
def test_document_types_and_entities_are_refused(opened, doctype):
    """XML that could pull in or multiply text is refused."""
    assert refused(opened, doctype=doctype) == "unsafe_xml"


def test_what_cannot_be_read_is_refused(opened):
    """Cut documents, words among the digits, and missing scale or time are refused with their code."""
    assert refused(opened, cut=5000) == "bad_header_number"
    assert refused(opened, np.array(["1", "x"])) == "bad_header_number"
    assert refused(opened, scale="0") == "amplitude_scale_missing"
    assert refused(opened, unit="kg") == "unit_unknown"
    assert refused(opened, increment="0") == "bad_header_number"
    assert refused(opened, increment="1", step_unit="s") == "sampling_rate_out_of_range"
    assert refused(opened, np.array([])) == "no_samples"
    assert refused(opened, names=()) == "no_signals"


def test_first_of_several_leads(opened):
    """Of several leads the first is taken, or the one that is set."""
    assert opened(names=("I", "II")).lead == "I"
    assert opened(names=("I", "II"), site=Site(ecg_channel="II")).lead == "II"
