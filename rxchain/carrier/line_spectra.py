"""Spectra of the band in which lines are searched, as densities in dB."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.carrier.block_sums import hann
from rxchain.carrier.hops import EVERY_HOPS, SPECTRUM_HOPS
from rxchain.streams import ComplexBlock

_FLOOR = np.float32(1e-37)
_NOISE_BANDWIDTH_BINS = 1.5  # of a Hann window: F. J. Harris 1978, table I


class LineSpectra:
    """Hann spectra 32 hops long of ``2 * half + 1`` bins about zero; with margins, as the band of a channel wraps."""

    def __init__(self, rate_hz: float, hop_samples: int, search_hz: float) -> None:
        self.length = SPECTRUM_HOPS * hop_samples
        self.bin_hz = rate_hz / self.length
        self.every_s = EVERY_HOPS * hop_samples / rate_hz
        self.half = min(round(min(search_hz, 0.5 * rate_hz) / self.bin_hz), self.length // 2 - 1)
        window = hann(self.length)
        self._window = (window / np.sqrt(np.sum(window**2) * rate_hz)).astype(np.float32)

    def levels_db(self, samples: ComplexBlock, margin: int) -> NDArray[np.float32]:
        """Power per hertz in dB of ``(channels, length)`` samples: float32, ``(channels, 2 * (half + margin) + 1)``."""
        reach = self.half + margin
        taken = np.arange(-reach, reach + 1) % self.length
        spectrum = np.asarray(scipy.fft.fft(samples * self._window, axis=1))[:, taken]
        power = spectrum.real**2 + spectrum.imag**2
        levels: NDArray[np.float32] = np.float32(10.0) * np.log10(power + _FLOOR)
        return levels

    def density_of(self, power: NDArray[np.float64]) -> NDArray[np.float64]:
        """What a line of that power reads at its bin."""
        return power / (_NOISE_BANDWIDTH_BINS * self.bin_hz)
