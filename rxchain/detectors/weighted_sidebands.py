"""Both sidebands of a coherently received double sideband, each weighted by its strength of the moment.

In selective fading one sideband may be in a null while the other is strong. Of two copies in equal noise the best sum
weights each by its amplitude (D. G. Brennan, Proc. IRE 47 (1959) 1075-1102); weights by power, which leave more of a
faded and therefore distorted copy out, measured as good or better. They follow the sidebands' powers over the last fifth
of a second, and their sum is constant: where both are equally strong the output is that of both.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.detectors.coherent import CoherentDetector
from rxchain.streams import ComplexBlock, FloatBlock, Floats

_MEMORY_S = 0.2
_TINY = 1e-30


class WeightedSidebands(CoherentDetector):
    """A coherent detector of one message whose two copies are summed by their strength.

    taps : complex, (channels or 1, 2, n_taps): the upper sideband's filter and the lower's, each of which alone gives
        the message whole. process(iq) : complex64, (channels, n). Returns float32, (channels, 1, m).
    """

    def __init__(self, taps: NDArray[np.complex128], n_channels: int, rate_hz: float, hop: int = 256) -> None:
        self._gain = 1.0 - float(np.exp(-hop / (_MEMORY_S * rate_hz)))
        self._rise = ((np.arange(hop) + 0.5) / hop).astype(np.float32)
        super().__init__(taps, n_channels, hop)
        self._nothing = self._nothing[:, :1]

    def reset(self) -> None:
        """As new, with the same settings."""
        super().reset()
        n_channels = self._input_shape[0]
        self._power: Floats = np.zeros((n_channels, 2))
        self._share: NDArray[np.float32] = np.full((n_channels, 1), 0.5, np.float32)

    def _advance(self, window: ComplexBlock) -> FloatBlock:
        copies = self._messages(window, self._direct, self._mirrored)
        power = np.mean(np.square(copies), axis=2, dtype=np.float64)
        self._power += self._gain * (power - self._power)
        strength = self._power + _TINY
        share = (strength[:, :1] / strength.sum(axis=1, keepdims=True)).astype(np.float32)
        upper = self._share + (share - self._share) * self._rise
        self._share = share
        summed: FloatBlock = upper * copies[:, 0] + (np.float32(1.0) - upper) * copies[:, 1]
        return summed[:, None]
