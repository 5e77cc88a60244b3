"""Watch the motion of a line: a frequency left wrong by a deep fade, and fading too fast for the frequency filter.

Both are read from lag products of the smoothed line (pulse-pair estimates of mean frequency and spread: D. S. Zrnic,
"Spectral moment estimates from correlated pulse pairs", IEEE Trans. AES-13, 1977).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.phasor import unit_phasor
from rxchain.streams import Bools, Floats

_LAG_MEMORY_S = 0.3
_NARROW_HOPS = 6  # after the middle of the narrow window
_FALLEN, _FALLEN_S = 1e-3, 0.15  # a line so much weaker for so long: what it was before tells nothing any more
_COHERENT = 2.0  # lag product over noise power: noise alone gives its correlation, 0.5 to 0.9
_WRONG_HZ = 1.0
_ASTRAY_CYCLES = 0.5  # half a second at 1 Hz, less at more
_SPREAD_MEMORY_S = 2.0
_FAST_HZ, _CALM_HZ = 3.0, 2.0  # above and below which the frequency belongs to the lag product, and to the filter
_CLEAR = 10.0  # power over noise at which a phase counts for the spread


class MotionWatch:
    """Frequency of a line against its reference, and its Doppler spread (two standard deviations), once a quantum.

    lag_hz : float64, (channels,): mean frequency against the reference, over 0.3 s.
    fast : bool, (channels,): whether the line fades too fast for the frequency filter.
    """

    def __init__(self, n_channels: int, lag: int, hops: int, hop_s: float, fast_fading: bool) -> None:
        quantum_s = hops * hop_s
        self._blind_s = (lag + _NARROW_HOPS) * hop_s
        self._hop_s = hop_s
        self._quantum_s = quantum_s
        self._fast_fading = fast_fading
        self._gain = quantum_s / _LAG_MEMORY_S
        self._spread_gain = quantum_s / _SPREAD_MEMORY_S
        self._last = np.zeros(n_channels, np.complex128)
        self._product = np.zeros(n_channels, np.complex128)
        self._slow_product = np.zeros(n_channels, np.complex128)
        self._slow_size: Floats = np.zeros(n_channels)
        self._astray: Floats = np.zeros(n_channels)
        self._fallen_s: Floats = np.zeros(n_channels)
        self._since_shift_s: Floats = np.full(n_channels, np.inf)
        self.lag_hz: Floats = np.zeros(n_channels)
        self.fast: Bools = np.zeros(n_channels, np.bool_)

    def start(self, channel: int) -> None:
        """A new line."""
        for state in (self._last, self._product, self._slow_product):
            state[channel] = 0.0
        for figure in (self._slow_size, self._astray, self._fallen_s, self.lag_hz):
            figure[channel] = 0.0
        self._since_shift_s[channel] = np.inf
        self.fast[channel] = False

    def watch(self, line: NDArray[np.complex128], noise: Floats, active: Bools) -> Bools:
        """Take in a quantum; the channels whose frequency is to be shifted by ``lag_hz``, once.

        line : the line by a narrow window, wide enough in frequency to show what the frequency filter has missed;
            complex128, (channels, hops). noise : noise power in it.
        """
        earlier = np.concatenate([self._last[:, None], line[:, :-1]], axis=1)
        product = np.mean(line * earlier.conj(), axis=1)
        fallen = np.abs(product) < _FALLEN * np.abs(self._product)
        self._fallen_s = np.where(fallen, self._fallen_s + self._quantum_s, 0.0)
        self._product += np.where(self._fallen_s > _FALLEN_S, 1.0, self._gain) * (product - self._product)
        self.lag_hz = np.angle(self._product) / (2.0 * np.pi * self._hop_s)
        if self._fast_fading:
            # Less the mean frequency: a line that drifts away is no fading.
            steady = unit_phasor(-self.lag_hz * self._quantum_s)
            self._measure_spread(line[:, -1] * self._last.conj() * steady, noise, active)
        self._last = line[:, -1]
        coherent = np.minimum(np.abs(self._product), np.abs(product)) > _COHERENT * noise
        wrong_hz = np.abs(self.lag_hz)
        # What a shift has changed shows only once it has come through the look-ahead.
        self._since_shift_s += self._quantum_s
        seeing = self._since_shift_s > self._blind_s
        wrong = active & coherent & (wrong_hz > _WRONG_HZ) & ~self.fast & seeing
        self._astray = np.where(wrong, self._astray + wrong_hz * self._quantum_s, 0.0)
        shift = self._astray > _ASTRAY_CYCLES
        self._astray[shift] = self._since_shift_s[shift] = 0.0
        self._product[shift | ~seeing] = 0.0
        return shift

    def _measure_spread(self, product: NDArray[np.complex128], noise: Floats, active: Bools) -> None:
        size = np.abs(product)
        gain = self._spread_gain * (active & (size > _CLEAR * noise))
        self._slow_product += gain * (product - self._slow_product)
        # Noise makes phasors differ too: its share is taken off before they are compared.
        self._slow_size += gain * (size - 0.5 * noise - self._slow_size)
        likeness = np.abs(self._slow_product) / np.maximum(self._slow_size, 1e-300)
        likeness = np.where(self._slow_size > 0.0, np.clip(likeness, 1e-6, 1.0), 1.0)
        spread_hz = np.sqrt(-2.0 * np.log(likeness)) / (np.pi * self._quantum_s)
        self.fast = spread_hz > np.where(self.fast, _CALM_HZ, _FAST_HZ)
