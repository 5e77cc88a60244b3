"""Sample formats of I/Q files and receivers, and how each becomes complex64 against a full scale of 1.0."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import ComplexBlock

LARGEST_SAMPLE = np.float32(1e4)  # 80 dB over full scale: nothing a receiver writes


@dataclass(frozen=True, slots=True)
class SampleFormat:
    """One component's type, what is taken off it, and the value that counts as full scale.

    low, high : the converter's rails; a sample with a component there counts as overloaded. None for floating point.
    """

    name: str
    dtype: str
    offset: float
    full_scale: float
    low: int | None
    high: int | None

    @property
    def sample_bytes(self) -> int:
        """Bytes of one complex sample."""
        return 2 * np.dtype(self.dtype).itemsize

    def decode(self, components: NDArray[np.generic]) -> tuple[ComplexBlock, int]:
        """Samples, and how many of them are overloaded, from interleaved components (I first).

        In a floating-point file a sample that is no finite number, or an absurd one, becomes 0 and counts as
        overloaded: it must not poison what comes after it.
        """
        values = np.empty(len(components), np.float32)
        np.subtract(components, np.float32(self.offset), out=values, dtype=np.float32, casting="unsafe")
        if self.low is None or self.high is None:
            bad = ~(np.abs(values) <= LARGEST_SAMPLE)  # true of what is no number, too
            values[bad] = 0.0
            over = bad.reshape(-1, 2).any(axis=1)
        else:
            if self.full_scale != 1.0:
                values *= np.float32(1.0 / self.full_scale)
            if components.size == 0 or (components.min() > self.low and components.max() < self.high):
                return values.view(np.complex64), 0
            pairs = components.reshape(-1, 2)
            over = ((pairs == self.low) | (pairs == self.high)).any(axis=1)
        return values.view(np.complex64), int(np.count_nonzero(over))


# An unsigned byte's middle lies between 127 and 128.
CU8 = SampleFormat("cu8", "u1", 127.5, 127.5, 0, 255)
CI8 = SampleFormat("ci8", "i1", 0.0, 128.0, -128, 127)
CI16 = SampleFormat("ci16_le", "<i2", 0.0, 32768.0, -32768, 32767)
CF32 = SampleFormat("cf32_le", "<f4", 0.0, 1.0, None, None)

BY_SIGMF_NAME = {one.name: one for one in (CU8, CI8, CI16, CF32)} | {"cu8_le": CU8, "ci8_le": CI8}
BY_SUFFIX = {".cu8": CU8, ".cs8": CI8, ".cs16": CI16, ".cf32": CF32}
