"""Watch the motion of a line: a frequency left wrong by a deep fade, and fading too fast for the frequency filter.

Both are read from lag products of the smoothed line (pulse-pair estimates of mean frequency and spread: D. S. Zrnic,
"Spectral moment estimates from correlated pulse pairs", IEEE Trans. AES-13, 1977).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Bools, Floats

_LAG_MEMORY_S = 0.3
_WRONG_HZ = 1.0
_WRONG_S = 0.5
_SPREAD_MEMORY_S = 2.0
_SPREAD_FROM_HZ, _SPREAD_TO_HZ = 2.5, 3.5  # between which the frequency goes over to the lag product
_CLEAR = 10.0  # power over noise at which a phase counts for the spread


class MotionWatch:
    """Frequency of the smoothed line against its reference, and its Doppler spread (two standard deviations)."""

    def __init__(self, n_channels: int, hops: int, hop_s: float, fast_fading: bool) -> None:
        self._hop_s, self._quantum_s = hop_s, hops * hop_s
        self._fast_fading = fast_fading
        self._gain = self._quantum_s / _LAG_MEMORY_S
        self._spread_gain = self._quantum_s / _SPREAD_MEMORY_S
        self._last = np.zeros(n_channels, np.complex128)
        self._product = np.zeros(n_channels, np.complex128)
        self._last_narrow = np.zeros(n_channels, np.complex128)
        self._pair = np.zeros(n_channels, np.complex128)
        self._pair_size = np.zeros(n_channels)
        self._wrong_s = np.zeros(n_channels)
        self.lag_hz: Floats = np.zeros(n_channels)
        self.fast: Floats = np.zeros(n_channels)

    def start(self, channel: int) -> None:
        """A new line."""
        for state in (self._last, self._product, self._last_narrow, self._pair):
            state[channel] = 0.0
        for figure in (self._pair_size, self._wrong_s, self.lag_hz, self.fast):
            figure[channel] = 0.0

    def watch(
        self, line: NDArray[np.complex128], narrow: NDArray[np.complex64], narrow_noise: Floats, locked: Bools
    ) -> Bools:
        """Take in a quantum; the channels whose frequency is to be shifted by ``lag_hz``, once."""
        earlier = np.concatenate([self._last[:, None], line[:, :-1]], axis=1)
        self._product += self._gain * (np.mean(line * earlier.conj(), axis=1) - self._product)
        self._last = line[:, -1].copy()
        self.lag_hz = np.angle(self._product) / (2.0 * np.pi * self._hop_s)
        if self._fast_fading:
            self._measure_spread(narrow.astype(np.complex128), narrow_noise, locked)
        wrong = locked & (np.abs(self.lag_hz) > _WRONG_HZ) & (self.fast == 0.0)
        self._wrong_s = np.where(wrong, self._wrong_s + self._quantum_s, 0.0)
        shift = self._wrong_s > _WRONG_S
        self._wrong_s[shift] = 0.0
        self._product[shift] = 0.0
        return shift

    def _measure_spread(self, narrow: NDArray[np.complex128], noise: Floats, locked: Bools) -> None:
        product = narrow * self._last_narrow.conj()
        self._last_narrow = narrow
        size = np.abs(product)
        gain = self._spread_gain * (locked & (size > _CLEAR * noise))
        self._pair += gain * (product - self._pair)
        # Noise makes phasors differ too: its share is taken off before they are compared.
        self._pair_size += gain * (size - 0.5 * noise - self._pair_size)
        likeness = np.abs(self._pair) / np.maximum(self._pair_size, 1e-300)
        likeness = np.where(self._pair_size > 0.0, np.clip(likeness, 1e-6, 1.0), 1.0)
        spread_hz = 2.0 * np.sqrt(-0.5 * np.log(likeness)) / (np.pi * self._quantum_s)
        self.fast = np.clip((spread_hz - _SPREAD_FROM_HZ) / (_SPREAD_TO_HZ - _SPREAD_FROM_HZ), 0.0, 1.0)
