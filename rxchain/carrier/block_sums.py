"""Block sums: each channel mixed to its carrier and averaged over a Hann window, once a hop.

The oscillator is folded into the window's weights, so nothing is derotated at the full rate on the way in. Plain
boxcar sums would let the message in: their first side lobe is only 13 dB down, a Hann window's 31 dB (F. J. Harris,
"On the use of windows for harmonic analysis with the discrete Fourier transform", Proc. IEEE 66, 1978, table I).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Bools, ComplexBlock, Floats

_RETUNE_HZ = 8.0  # a line this far off the window's middle loses under 0.1 dB and is worth new weights


def hann(length: int) -> Floats:
    """Hann window sampled between its zeros; float64, shape (length,), sum ``length / 2``."""
    return 0.5 - 0.5 * np.cos(2.0 * np.pi * (np.arange(length) + 0.5) / length)


class BlockSums:
    """One complex amplitude a hop, about each channel's own frequency, phase as at the middle of the window."""

    def __init__(self, n_channels: int, rate_hz: float, hop_samples: int, span_hops: int) -> None:
        self._hop = hop_samples
        self._span = span_hops
        window = hann(span_hops * hop_samples)
        self._window = window / window.sum()
        self._time_s = (np.arange(len(window)) + 0.5 - len(window) / 2) / rate_hz
        self.noise_bandwidth_hz = float(rate_hz * np.sum(self._window**2))
        overlap = [
            np.sum(window[i * hop_samples :] * window[: len(window) - i * hop_samples]) for i in range(span_hops)
        ]
        self.overlap_correlation = np.array(overlap) / overlap[0]
        self.tuned_hz: Floats = np.zeros(n_channels)
        self._weights = np.empty((n_channels, hop_samples, span_hops), np.complex64)
        self._remake(np.ones(n_channels, np.bool_))

    def retune(self, line_hz: Floats) -> None:
        """Move the windows that a line has left behind."""
        far = np.abs(line_hz - self.tuned_hz) > _RETUNE_HZ
        if far.any():
            self.tuned_hz = np.where(far, line_hz, self.tuned_hz)
            self._remake(far)

    def tune(self, channel: int, line_hz: float) -> None:
        """Move one channel's window, however far."""
        which = np.arange(len(self.tuned_hz)) == channel
        self.tuned_hz = np.where(which, line_hz, self.tuned_hz)
        self._remake(which)

    def sums(self, samples: ComplexBlock) -> ComplexBlock:
        """Sums of ``(channels, (hops + span - 1) * hop_samples)`` samples: complex64, ``(channels, hops)``."""
        return self._sums(samples, self._weights)

    def sums_of(self, channel: int, samples: ComplexBlock) -> ComplexBlock:
        """The same for a single channel: samples ``(n,)``, sums ``(hops,)``."""
        sums: ComplexBlock = self._sums(samples[None], self._weights[channel : channel + 1])[0]
        return sums

    def _sums(self, samples: ComplexBlock, weights: NDArray[np.complex64]) -> ComplexBlock:
        # Each hop against each part of the window, then the parts of one window added up.
        parts = np.matmul(samples.reshape(samples.shape[0], -1, self._hop), weights)
        hops = parts.shape[1] - self._span + 1
        total: ComplexBlock = parts[:, :hops, 0].copy()
        for i in range(1, self._span):
            total += parts[:, i : i + hops, i]
        return total

    def _remake(self, which: Bools) -> None:
        turns = self.tuned_hz[which, None] * self._time_s
        weights = (self._window * np.exp(-2j * np.pi * turns)).reshape(-1, self._span, self._hop)
        self._weights[which] = weights.transpose(0, 2, 1)
