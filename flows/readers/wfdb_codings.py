"""How WFDB signal files hold their samples: formats 16, 24, 32, 61, 80, 160 and 212, and the compressed ones.

Source: WFDB specification, physionet.org/physiotools/wag/signal-5.htm. The marker of a missing sample is the lowest
value of each format (from memory: WFDB library, WFDB_INVALID_SAMPLE).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from flows.readers.codes import Refused
from flows.readers.wfdb_flac import FlacCoding


@dataclass(frozen=True)
class Coding:
    """One format: `group_samples` samples lie in `group_bytes` bytes; `decode` turns whole groups into counts."""

    group_samples: int
    group_bytes: int
    lowest: int
    highest: int
    decode: Callable[[NDArray[np.uint8]], NDArray[Any]]

    @property
    def missing(self) -> int:
        """Count that marks a missing sample."""
        return self.lowest

    @property
    def is_wide(self) -> bool:
        """Counts may not fit into 16 bit."""
        return self.highest > 32767

    def count(self, path: Path, byte_offset: int) -> int:
        """Samples that a file holds, all its signals together."""
        return self._samples_in(path.stat().st_size - byte_offset)

    def _samples_in(self, n_bytes: int) -> int:
        """Samples that `n_bytes` hold; a last half group may hold one."""
        groups, rest = divmod(max(n_bytes, 0), self.group_bytes)
        return groups * self.group_samples + int(self.group_samples == 2 and rest == 2)

    def read(self, path: Path, byte_offset: int, a: int, b: int) -> NDArray[Any]:
        """Samples a (included) to b (excluded) of a file, all its signals interleaved."""
        first_group, last_group = a // self.group_samples, -(-b // self.group_samples)
        buffer = np.zeros((last_group - first_group) * self.group_bytes, np.uint8)
        with path.open("rb", buffering=0) as file:
            file.seek(byte_offset + first_group * self.group_bytes)
            got = file.readinto(buffer.data)
        if self._samples_in(got) < b - first_group * self.group_samples:
            raise Refused("samples_cut_short", "signal file: it became shorter while it was read. Deliver it again.")
        counts = self.decode(buffer)
        return counts[a - first_group * self.group_samples : b - first_group * self.group_samples]


def _triples24(raw: NDArray[np.uint8]) -> NDArray[np.int32]:
    wide = np.zeros((raw.size // 3, 4), np.uint8)
    wide[:, 1:] = raw.reshape(-1, 3)
    return wide.view("<i4").reshape(-1) >> 8


def _pairs212(raw: NDArray[np.uint8]) -> NDArray[np.int16]:
    """Two 12-bit samples in three bytes: low byte, both high nibbles, low byte."""
    triples = raw.reshape(-1, 3).astype(np.int16)
    counts = np.empty((len(triples), 2), np.int16)
    counts[:, 0] = (triples[:, 1] << 12 >> 4) | triples[:, 0]
    counts[:, 1] = (triples[:, 1] << 8 >> 12 << 8) | triples[:, 2]
    return counts.reshape(-1)


CODINGS: dict[int, Coding | FlacCoding] = {
    16: Coding(1, 2, -(2**15), 2**15 - 1, lambda raw: raw.view("<i2")),
    24: Coding(1, 3, -(2**23), 2**23 - 1, _triples24),
    32: Coding(1, 4, -(2**31), 2**31 - 1, lambda raw: raw.view("<i4")),
    61: Coding(1, 2, -(2**15), 2**15 - 1, lambda raw: raw.view(">i2").astype(np.int16)),
    80: Coding(1, 1, -(2**7), 2**7 - 1, lambda raw: raw.astype(np.int16) - 128),
    160: Coding(1, 2, -(2**15), 2**15 - 1, lambda raw: (raw.view("<u2").astype(np.int32) - 32768).astype(np.int16)),
    508: FlacCoding(8),
    516: FlacCoding(16),
    524: FlacCoding(24),
    212: Coding(2, 3, -(2**11), 2**11 - 1, _pairs212),
}
