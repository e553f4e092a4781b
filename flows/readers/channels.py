"""Which channel of a file is the ECG, and how many millivolts its unit is."""

from __future__ import annotations

import re
from collections.abc import Sequence

from flows.readers.codes import Refused
from flows.readers.recording import Finding, finding

# casefold turns the micro sign into the Greek letter mu, so one spelling stands for both.
_MV_PER_UNIT = {"v": 1000.0, "mv": 1.0, "uv": 1e-3, "μv": 1e-3, "nv": 1e-6}
_LEAD = re.compile(
    r"(M?L?(I|II|III)|D[1-3]|AV[RLF]|M?V[1-9]R?|MCL?[1-6]|C[MCBSR]?[1-6]|ES|AS|AI|[XYZ]|(LEAD|MOD) ?\S+)([ +].*)?",
    re.IGNORECASE,
)
ECG_NAME = re.compile(r"\b(ECG|EKG)|(ECG|EKG)\b", re.IGNORECASE)


def mv_per_unit(unit: str) -> float | None:
    """Millivolts per unit, or None when the unit is not a voltage."""
    return _MV_PER_UNIT.get(unit.strip().casefold())


def choose(labels: Sequence[str], units: Sequence[str], wanted: str, where: str) -> tuple[int, tuple[Finding, ...]]:
    """Number of the ECG channel and what has to be said about the choice.

    A channel named in the settings wins. Then the only channel called ECG or by a lead name; of several differently
    named leads the first; else the only channel in volts.
    """
    if wanted:
        return _named(labels, wanted, where), ()
    named = [n for n, label in enumerate(labels) if ECG_NAME.search(label)]
    if len(named) != 1:
        named = [n for n, label in enumerate(labels) if ECG_NAME.search(label) or _LEAD.fullmatch(_bare(label))]
    if len(named) == 1:
        return named[0], ()
    if named:
        return _first_lead(labels, named, where)
    volts = [n for n, unit in enumerate(units) if mv_per_unit(unit)]
    if len(volts) == 1:
        return volts[0], (finding("channel_chosen_by_unit", f"channel {volts[0] + 1}"),)
    raise Refused(
        "no_ecg_channel",
        f"{where}: none of the {len(labels)} channels is called ECG or by a lead name, and {len(volts)} are in volts; "
        "expected one. Name it as ecg_channel in section [site] of programme.toml.",
    )


def _bare(label: str) -> str:
    return ECG_NAME.sub("", label).strip(" -_:")


def _named(labels: Sequence[str], wanted: str, where: str) -> int:
    """Number of the channel of this label, or of the channel that is counted off: #1 is the first."""
    if wanted.startswith("#") and wanted[1:].isdigit() and 1 <= int(wanted[1:]) <= len(labels):
        return int(wanted[1:]) - 1
    found = [n for n, label in enumerate(labels) if label.strip().casefold() == wanted.casefold()]
    if len(found) == 1:
        return found[0]
    code = "several_ecg_channels" if found else "no_ecg_channel"
    raise Refused(
        code,
        f"{where}: {len(found)} of {len(labels)} channels have the name set as ecg_channel in section [site]; "
        "expected one.",
    )


def _first_lead(labels: Sequence[str], named: list[int], where: str) -> tuple[int, tuple[Finding, ...]]:
    leads = {_bare(labels[n]).casefold() for n in named}
    if len(leads) == len(named) and "" not in leads and all(_LEAD.fullmatch(lead) for lead in leads):
        return named[0], (finding("first_of_several_leads", f"{len(named)} leads"),)
    numbers = ", ".join(str(n + 1) for n in named)
    raise Refused(
        "several_ecg_channels",
        f"{where}: channels {numbers} are all called ECG; expected one, or different lead names. "
        "Name it as ecg_channel in section [site] of programme.toml.",
    )
