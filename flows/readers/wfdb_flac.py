"""WFDB signal files compressed as FLAC: formats 508, 516 and 524, each signal an audio channel.

Source: WFDB specification, physionet.org/physiotools/wag/signal-5.htm. Needs the extra `flac` (soundfile).
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from flows.readers.codes import Refused


@dataclass(frozen=True)
class FlacCoding:
    """One compressed format by its bits per sample."""

    bits: int

    @property
    def lowest(self) -> int:
        """Lowest count of the format."""
        return -(2 ** (self.bits - 1))

    @property
    def highest(self) -> int:
        """Highest count of the format."""
        return 2 ** (self.bits - 1) - 1

    @property
    def missing(self) -> int:
        """Count that marks a missing sample."""
        return self.lowest

    @property
    def is_wide(self) -> bool:
        """Counts may not fit into 16 bit."""
        return self.bits > 16

    def count(self, path: Path, byte_offset: int) -> int:
        """Samples that a file holds, all its signals together."""
        with _opened(path, byte_offset) as audio:
            return int(audio.frames) * int(audio.channels)

    def read(self, path: Path, byte_offset: int, a: int, b: int) -> NDArray[Any]:
        """Samples a (included) to b (excluded) of a file, all its signals interleaved."""
        dtype, shift = ("int16", 16 - self.bits) if self.bits <= 16 else ("int32", 32 - self.bits)
        with _opened(path, byte_offset) as audio:
            first, last = a // audio.channels, -(-b // audio.channels)
            try:
                audio.seek(first)
                frames = audio.read(last - first, dtype=dtype, always_2d=True)
            except (RuntimeError, ValueError) as problem:
                raise _damaged() from problem
            if len(frames) < last - first:
                raise _damaged()
        counts: NDArray[Any] = np.right_shift(frames, shift).reshape(-1)
        return counts[a - first * frames.shape[1] : b - first * frames.shape[1]]


def _damaged() -> Refused:
    return Refused("samples_cut_short", "signal file: its compressed samples are cut or damaged. Deliver it again.")


def _opened(path: Path, byte_offset: int) -> Any:
    try:
        import soundfile
    except ImportError:
        raise Refused(
            "sample_coding_not_supported",
            "header: the samples are FLAC-compressed; reading them needs the extra: pip install 'burdenline[flac]'.",
        ) from None
    if byte_offset:
        raise Refused("sample_coding_not_supported", "header: a compressed signal file has a byte offset; expected 0.")
    try:
        return soundfile.SoundFile(path)
    except (RuntimeError, TypeError) as problem:
        raise _damaged() from problem
