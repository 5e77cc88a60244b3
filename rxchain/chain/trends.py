"""The last minute of each channel's offset and SNR, a point a second, for whoever draws a line of them."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

import numpy as np

from rxchain.meters.figures import Figures
from rxchain.streams import Floats, Reading

_POINTS = 60


class Trends:
    """Of so many channels; a moment without a figure is nan."""

    def __init__(self, n_channels: int) -> None:
        self._offsets: list[deque[float]] = [deque(maxlen=_POINTS) for _ in range(n_channels)]
        self._snrs: list[deque[float]] = [deque(maxlen=_POINTS) for _ in range(n_channels)]
        self._next_s = 0.0

    def note(self, at_s: float, figures: Sequence[Figures]) -> None:
        """Takes every channel's figures at a time of the stream, where a second has gone by."""
        if at_s < self._next_s:
            return
        self._next_s = at_s + 1.0
        for offsets, snrs, one in zip(self._offsets, self._snrs, figures, strict=True):
            offsets.append(_value(one.carrier_offset_hz))
            snrs.append(_value(one.snr_db))

    def offset_hz(self, place: int) -> Floats:
        """A channel's offsets, oldest first."""
        return np.array(self._offsets[place], dtype=np.float64)

    def snr_db(self, place: int) -> Floats:
        """A channel's SNRs, oldest first."""
        return np.array(self._snrs[place], dtype=np.float64)


def _value(reading: Reading | None) -> float:
    return float("nan") if reading is None else reading.value
