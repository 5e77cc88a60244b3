"""Hold a phase through noise, and count its turns.

``line + weight * noise * last`` does nothing while the line stands above the noise; below it the phase stays where it
was, on the frequency it had. The phase is kept as a running total, so a fraction of it (half of it, where the square
of a signal is followed) has no jumps by part of a turn.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Floats


class PhaseHold:
    """The line's phase per hop against its reference, in cycles, continuous."""

    def __init__(self, n_channels: int, weight: float) -> None:
        self._weight = weight
        self._last = np.zeros(n_channels, np.complex128)
        self._cycles: Floats = np.zeros(n_channels)

    def start(self, channel: int) -> None:
        """A new line: nothing to hold on to."""
        self._last[channel] = 0.0
        self._cycles[channel] = 0.0

    def hold(self, line: NDArray[np.complex128], noise_amplitude: Floats) -> tuple[Floats, Floats]:
        """Phases at the hop before the first, ``(channels,)``, and at each hop, ``(channels, hops)``."""
        kept = (self._weight * noise_amplitude * self._last)[:, None]
        phasor = line + kept
        size = np.abs(phasor)
        phasor = np.where(size > 0.0, phasor / np.maximum(size, 1e-300), self._last[:, None])
        angle = np.angle(phasor) / (2.0 * np.pi)
        step = np.empty_like(angle)
        step[:, 0] = angle[:, 0] - self._cycles
        step[:, 1:] = np.diff(angle, axis=1)
        step -= np.rint(step)
        before = np.where(self._last == 0.0, angle[:, 0], self._cycles)
        cycles = self._cycles[:, None] + np.cumsum(step, axis=1)
        self._last = phasor[:, -1].copy()
        self._cycles = cycles[:, -1].copy()
        return before, cycles
