"""Arrays in, arrays out: beats, families, episodes, quality, change statistics. No files, no clock, no settings object."""

from detectors.analyse import analyse_recording, analyse_signal

__all__ = ["analyse_recording", "analyse_signal"]
