"""Where a capture is occupied and when: mean spectra slot by slot against their own floor."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy import ndimage
from scipy.special import gammaincinv

from rxchain.kernels.overlap_save import Windows
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import Bools, ComplexBlock, Floats

_BIN_HZ = 50.0
_SLOT_S = 0.25
_MOST_SLOTS = 512  # beyond, two become one: memory stays bounded, times become coarser
SMOOTHED_BINS = 5
_FLOOR_HZ, _FLOOR_QUANTILE = 20_000.0, 0.2
_OVER_FLOOR_DB = 2.5
_EDGE_SHARE = 0.005  # of a capture that was filtered narrower than its rate


@dataclass(frozen=True, slots=True)
class Occupancy:
    """frequency_hz : (bins,), from the capture's centre, ascending. power : float32, (slots, bins). floor : the same shape.
    is_occupied : bool, (slots, bins). slot_s : length of a slot.
    """

    frequency_hz: Floats
    power: NDArray[np.float32]
    floor: NDArray[np.float32]
    is_occupied: Bools
    slot_s: float

    @property
    def bin_hz(self) -> float:
        """Width of a bin."""
        return float(self.frequency_hz[1] - self.frequency_hz[0])


class OccupancyMap:
    """Gathers a capture of any length at ``rate_hz``.

    process(iq) : complex64, (n,). occupancy() : what has been seen so far.
    """

    def __init__(self, rate_hz: float) -> None:
        self._rate_hz = rate_hz
        self._length = next_smooth(max(64, round(rate_hz / _BIN_HZ)), multiple_of=2)
        self._window = np.hanning(self._length + 1)[:-1].astype(np.float32)
        half = self._length // 2
        self._windows: Windows[np.complex64] = Windows((), half, half, np.complex64)
        self._frames_a_slot = max(1, round(_SLOT_S * rate_hz / half))
        self._merged = 1
        self._slots: list[NDArray[np.float32]] = []
        self._sum: NDArray[np.float64] = np.zeros(self._length)
        self._frames = 0
        self._is_first = True

    def process(self, iq: ComplexBlock) -> None:
        """Takes in samples."""
        while len(iq):
            window, iq = self._windows.take(iq)
            if window is not None and not self._is_first:
                spectrum = scipy.fft.fft(window * self._window)
                self._sum += np.square(spectrum.real) + np.square(spectrum.imag)
                self._frames += 1
                if self._frames == self._frames_a_slot * self._merged:
                    self._close_slot()
            self._is_first = self._is_first and window is None

    def occupancy(self) -> Occupancy:
        """Everything gathered."""
        if self._frames and (not self._slots or self._frames * 2 > self._frames_a_slot * self._merged):
            self._close_slot()
        power = np.array(self._slots, np.float32).reshape(len(self._slots), self._length)
        frames = self._frames_a_slot * self._merged
        slot_s = frames * self._length / 2 / self._rate_hz
        frequency_hz = scipy.fft.fftshift(scipy.fft.fftfreq(self._length, 1.0 / self._rate_hz))
        smooth = ndimage.uniform_filter1d(power, SMOOTHED_BINS, axis=1, mode="nearest")
        averages = max(1.0, frames * 0.95 * SMOOTHED_BINS / 1.5)
        floor = _local_floor(smooth, max(16, round(_FLOOR_HZ / (frequency_hz[1] - frequency_hz[0]))), averages)
        occupied = smooth > floor * (10.0 ** (_OVER_FLOOR_DB / 10.0) + 3.0 / np.sqrt(averages))
        return Occupancy(frequency_hz, power, floor.astype(np.float32), occupied, slot_s)

    def _close_slot(self) -> None:
        self._slots.append(scipy.fft.fftshift(self._sum / self._frames).astype(np.float32))
        self._sum[:] = 0.0
        self._frames = 0
        if len(self._slots) == _MOST_SLOTS:
            pairs = zip(self._slots[::2], self._slots[1::2], strict=True)
            self._slots = [0.5 * (one + other) for one, other in pairs]
            self._merged *= 2


def _local_floor(smooth: NDArray[np.floating], reach: int, averages: float) -> Floats:
    """The quietest fifth of the neighbourhood, brought up to the mean that noise of so many averages has there."""
    n_bins = smooth.shape[1]
    reach = min(reach, n_bins)
    edges = np.linspace(0, n_bins, max(1, n_bins // reach) + 1).astype(np.int64)
    blocks = np.stack(
        [np.quantile(smooth[:, a:b], _FLOOR_QUANTILE, axis=1) for a, b in pairwise(edges)],
        axis=1,
    )
    middles = 0.5 * (edges[:-1] + edges[1:])
    correction = averages / gammaincinv(averages, _FLOOR_QUANTILE)
    rows = [np.interp(np.arange(n_bins), middles, row) for row in blocks]
    return np.asarray(np.array(rows) * correction)
