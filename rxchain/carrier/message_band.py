"""Keep noise beyond the message out before a power of the signal is taken.

Noise times noise grows with the square of the band; taking it ahead of the power costs nothing later. The band is wide
while the carrier is searched for, and closes about the carrier once it is known.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.streams import Bools, ComplexBlock, Floats

_KAISER_BETA = 6.0  # stop band 60 dB down
_TRANSITION = 1.93  # half the transition band times the length in seconds, for that: J. F. Kaiser 1974
_SPARE_HZ = 60.0
_RETUNE_HZ = 40.0


class MessageBand:
    """A low-pass filter about each channel's carrier, linear in phase, that lags one hop; overlap-save by quanta."""

    def __init__(
        self, n_channels: int, rate_hz: float, hop_samples: int, hops: int, edge_hz: float, search_hz: float
    ) -> None:
        self._rate_hz, self._hop = rate_hz, hop_samples
        self.length = (hops + 2) * hop_samples
        spread_hz = _TRANSITION * rate_hz / (2 * hop_samples + 1)
        self._wide = self._taps(edge_hz + search_hz + spread_hz)
        self.close_taps = self._taps(edge_hz + _SPARE_HZ + spread_hz)
        self.bandwidth_hz = min(rate_hz, 2.0 * (edge_hz + _SPARE_HZ + spread_hz))
        self._centre_hz: Floats = np.zeros(n_channels)
        self._is_close: Bools = np.zeros(n_channels, np.bool_)
        wide = scipy.fft.fft(self._wide, self.length).astype(np.complex64)
        self._response: NDArray[np.complex64] = np.repeat(wide[None], n_channels, axis=0)
        self._wide_response = wide

    def filter(self, samples: ComplexBlock) -> ComplexBlock:
        """The newest quantum of the band, out of the newest ``length`` samples."""
        spectrum = scipy.fft.fft(samples, axis=1)
        spectrum *= self._response
        banded: ComplexBlock = scipy.fft.ifft(spectrum, axis=1, overwrite_x=True)[:, 2 * self._hop :]
        return banded

    def retune(self, carrier_hz: Floats, known: Bools) -> None:
        """Close the band about carriers that are known, open it where they no longer are."""
        opening = self._is_close & ~known
        closing = known & (~self._is_close | (np.abs(carrier_hz - self._centre_hz) > _RETUNE_HZ))
        if opening.any():
            self._response[opening] = self._wide_response
        if closing.any():
            self._centre_hz = np.where(closing, carrier_hz, self._centre_hz)
            turns = self._centre_hz[closing, None] * np.arange(-self._hop, self._hop + 1) / self._rate_hz
            taps = self.close_taps * np.exp(2j * np.pi * turns)
            self._response[closing] = scipy.fft.fft(taps, self.length, axis=1)
        self._is_close = known.copy()

    def _taps(self, edge_hz: float) -> Floats:
        k = np.arange(-self._hop, self._hop + 1)
        if edge_hz >= 0.5 * self._rate_hz:
            return np.where(k == 0, 1.0, 0.0)
        share = 2.0 * edge_hz / self._rate_hz
        taps: Floats = share * np.sinc(share * k) * np.kaiser(len(k), _KAISER_BETA)
        return taps
