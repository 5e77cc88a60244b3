"""The coherent detector: the real part of the upright channel, each message through a filter of its own.

With the carrier on the positive real axis every linear emission gives each of its messages as the real part of the
channel convolved with complex taps: both sidebands or one of them, an asymmetric weighting of the two (vestigial), or
the quadrature component (taps turned by a quarter). What differs between emissions is the taps alone.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.kernels.overlap_save import WindowedStage
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import ComplexBlock, FloatBlock


class CoherentDetector(WindowedStage[np.complex64]):
    """Messages of a group of upright channels.

    taps : complex, (channels or 1, messages, n_taps), n_taps odd: the filters, symmetric about their middles.
    process(iq) : complex64, (channels, n). Returns float32, (channels, messages, m): in the channel's own units.
    active_rows : channels whose messages are wanted; None for all. The others' output is silence.
    """

    active_rows: NDArray[np.intp] | None = None

    def __init__(self, taps: NDArray[np.complex128], n_channels: int, hop: int = 256) -> None:
        _, n_messages, n_taps = taps.shape
        length = next_smooth(n_taps - 1 + hop, multiple_of=2)
        response = scipy.fft.fft(taps, length, axis=2)
        positive = np.arange(length // 2 + 1)
        self._direct = response[:, :, positive].astype(np.complex64)
        self._mirrored: NDArray[np.complex64] | None = None
        if np.iscomplexobj(taps) and np.any(taps.imag):
            # Re(h * y) has the spectrum (H(f) Y(f) + conj(H(-f) Y(-f))) / 2, of which half the bins are enough.
            self._mirror = -positive % length
            self._direct /= 2
            self._mirrored = np.conj(response[:, :, self._mirror] / 2).astype(np.complex64)
        self._set_up((n_channels,), np.complex64, length - hop, hop, n_taps // 2, (n_channels, n_messages))

    def _advance(self, window: ComplexBlock) -> FloatBlock:
        rows = self.active_rows
        if rows is None:
            return self._messages(window, self._direct, self._mirrored)
        audio = np.zeros((*self._nothing.shape[:-1], self._windows.hop), np.float32)
        if len(rows):
            mirrored = self._mirrored if self._mirrored is None or len(self._mirrored) == 1 else self._mirrored[rows]
            direct = self._direct if len(self._direct) == 1 else self._direct[rows]
            audio[rows] = self._messages(window[rows], direct, mirrored)
        return audio

    def _messages(
        self, window: ComplexBlock, direct: NDArray[np.complex64], mirrored: NDArray[np.complex64] | None
    ) -> FloatBlock:
        if mirrored is None:  # real taps: the imaginary part has no say
            half = direct * scipy.fft.rfft(window.real, axis=1)[:, None, :]
        else:
            spectrum = scipy.fft.fft(window, axis=1)[:, None, :]
            half = direct * spectrum[:, :, : direct.shape[2]]
            half += mirrored * np.conj(spectrum[:, :, self._mirror])
        audio: FloatBlock = scipy.fft.irfft(half, window.shape[1], axis=2, overwrite_x=True)
        return audio[:, :, self._windows.overlap :]
