"""Keep what is far stronger than a line has ever been from being taken for that line.

A burst of interference, an impulse, an overdriven converter: for its time the line is not seen, and is carried on as
through a fade. What stays longer than half a second is believed: then the line itself has grown, or another has come.
"""

from __future__ import annotations

import numpy as np

from rxchain.streams import ComplexBlock, Floats

_MEMORY_S = 30.0  # of how strong the line has been
_BELIEVED_S = 0.5
_LEARNT_S = 2.0  # a line may be taken up in a pause of its message
_LARGEST = 1e8  # 160 dB over full scale; the fourth power still fits single precision


class BurstGuard:
    """Sets block sums far over a line's strength to 0.

    ratio : amplitude over the strongest the line has been in the last half minute from which it is not the line.
    """

    def __init__(self, n_channels: int, hops: int, hop_s: float, ratio: float) -> None:
        self._hop_s, self._quantum_s, self._ratio = hop_s, hops * hop_s, ratio
        self._fall = np.exp(-hops * hop_s / _MEMORY_S)
        self._strongest: Floats = np.zeros(n_channels)
        self._burst_s: Floats = np.zeros(n_channels)
        self._known_s: Floats = np.zeros(n_channels)

    def start(self, channel: int, amplitude: float) -> None:
        """A new line."""
        self._strongest[channel] = amplitude
        self._burst_s[channel] = self._known_s[channel] = 0.0

    def guard(self, sums: ComplexBlock, level: Floats) -> ComplexBlock:
        """The quantum's block sums, ``(channels, hops)``, without bursts; ``level`` is the line's present amplitude."""
        self._strongest = np.maximum(self._strongest * self._fall, level)
        self._known_s += self._quantum_s
        learnt = (self._known_s > _LEARNT_S) & (self._strongest > 0.0)
        limit2 = np.where(learnt, (self._ratio * self._strongest) ** 2, np.inf)
        power = sums.real**2 + sums.imag**2
        over = power > limit2[:, None]
        if not over.any():
            self._burst_s *= self._fall  # leftovers of single impulses do not add up
            return sums
        share = over.mean(axis=1)
        self._burst_s = np.where(
            share > 0.0, self._burst_s + self._hop_s * over.sum(axis=1), self._burst_s * self._fall
        )
        believed = self._burst_s > _BELIEVED_S
        self._strongest = np.where(believed, np.sqrt(power.max(axis=1)), self._strongest)
        self._burst_s[believed] = 0.0
        kept: ComplexBlock = np.where(over & ~believed[:, None], np.complex64(0.0), sums)
        return kept


def without_nonsense(samples: ComplexBlock) -> ComplexBlock:
    """The samples with 0 in the place of what is no number, or so large that its powers are none."""
    parts = samples.reshape(-1).view(np.float32)
    if np.vdot(parts, parts) < _LARGEST**2:  # false of what is no number, too
        return samples
    sane = (np.abs(samples.real) < _LARGEST) & (np.abs(samples.imag) < _LARGEST)
    cleaned: ComplexBlock = np.where(sane, samples, np.complex64(0.0))
    return cleaned
