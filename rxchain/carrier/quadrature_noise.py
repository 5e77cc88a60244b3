"""Noise about a line, from what lies across it.

The variance of the difference of two quadratures that share no samples is twice the quadrature's own, which is the
noise power of a block sum: blind to the carrier, to its amplitude, and nearly so to slow phase.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Floats

_MEMORY_S = 1.0
_OUTLIER = 12.0  # a squared difference counts as at most so many times the noise
_SETTLING_S = 0.3  # in which outliers are believed


class QuadratureNoise:
    """Noise power of one block sum per channel, and a second figure that falls only slowly."""

    def __init__(self, n_channels: int, span_hops: int, hops: int, hop_s: float, hold_s: float) -> None:
        self._span = span_hops
        self._quantum_s = hops * hop_s
        self._gain = 1.0 - (1.0 - hop_s / _MEMORY_S) ** hops
        self._fall = np.exp(-hops * hop_s / hold_s)
        self._last = np.zeros((n_channels, span_hops))
        self.power: Floats = np.full(n_channels, 1e-30)
        self.held: Floats = np.full(n_channels, 1e-30)

    def start(self, channel: int, power: float) -> None:
        """A new line, with a first idea of the noise about it."""
        self.power[channel] = self.held[channel] = power

    def measure(
        self, quadrature: Floats, gain_of_difference: Floats, present: NDArray[np.bool_], followed_s: Floats
    ) -> None:
        """Take in a quantum of quadratures; hops without any signal are no measurement.

        gain_of_difference : what the predictions behind the quadratures add to the noise, (channels,).
        """
        series = np.concatenate([self._last, quadrature], axis=1)
        self._last = series[:, -self._span :]
        square = (series[:, self._span :] - series[:, : -self._span]) ** 2 / gain_of_difference[:, None]
        limit = np.where(followed_s < _SETTLING_S, np.inf, _OUTLIER * self.power)
        share = present.mean(axis=1)
        mean = np.mean(np.minimum(square, limit[:, None]) * present, axis=1) / np.maximum(share, 1e-3)
        gain = np.maximum(self._gain, 1.0 / (2.0 + followed_s / self._quantum_s)) * share
        self.power += gain * (mean - self.power)
        np.maximum(self.power, 1e-30, out=self.power)
        self.held = np.maximum(self.power, self.held * np.where(share > 0.0, self._fall, 1.0))
