"""Takes steady tones out of a message: those it finds by itself, or one whose frequency is given.

A steady tone's power in its bin never falls; speech leaves every bin now and then. So the lowest power of each bin over
half a second, where it stands out of its neighbourhood and is not far below the mean, is a tone. Its bins are set to zero
in a short-time spectrum whose overlapping frames add up to what went in.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.kernels.overlap_save import WindowedStage
from rxchain.streams import Bools, FloatBlock

_FRAME, _HOP = 1_024, 256  # 85 ms, of which a quarter is new, at 12 kHz
_REMEMBERED = 20  # frames over which the lowest is taken: 0.43 s
_STEADY = 0.5  # of the mean: a tone's lowest is no further below
_STANDS_OUT = 30.0  # times the median of the lowest around
_AROUND, _EVERY = 41, 8  # bins that the median is taken over, and between those where it is taken
_SIDE_BINS = 5  # on either side of a tone that go with it: 59 Hz
_HELD_FRAMES = 24  # after its last sight


class ToneNotch(WindowedStage[np.float32]):
    """Notches for a group of channels.

    tones_hz : what to do in each channel: ``None`` nothing, nan find tones, a number take out that frequency.
    process(audio) : float32, (channels, messages, n). Returns the same without the tones; where nothing is to be done the
        samples come out as they went in, to rounding.
    """

    def __init__(self, tones_hz: Sequence[float | None], n_messages: int, rate_hz: float) -> None:
        n = len(tones_hz)
        self._finds: Bools = np.array([tone is not None and np.isnan(tone) for tone in tones_hz])
        self._passes: Bools = np.array([tone is None for tone in tones_hz])
        self._window = np.hanning(_FRAME + 1)[:-1].astype(np.float32)
        bins = _FRAME // 2 + 1
        self._fixed: Bools = np.zeros((n, 1, bins), bool)
        for row, tone in enumerate(tones_hz):
            if tone is not None and not np.isnan(tone):
                place = round(tone * _FRAME / rate_hz)
                self._fixed[row, :, max(0, place - _SIDE_BINS) : place + _SIDE_BINS + 1] = True
        self._places = np.minimum(np.arange(0, bins + _EVERY, _EVERY), bins - 1)
        self._shape = n, n_messages, bins
        shape = n, n_messages
        self._set_up(shape, np.float32, _FRAME - _HOP, _HOP, _FRAME - _HOP, shape)

    def reset(self) -> None:
        """As new, with the same settings."""
        super().reset()
        self._powers: FloatBlock = np.zeros((_REMEMBERED, *self._shape), np.float32)
        self._frames = 0
        self._since = np.full(self._shape, _HELD_FRAMES, np.int32)
        self._gain: FloatBlock = np.ones(self._shape, np.float32)
        self._sum: FloatBlock = np.zeros((*self._shape[:2], _FRAME), np.float32)

    def _advance(self, window: FloatBlock) -> FloatBlock:
        spectrum = scipy.fft.rfft(window * self._window, axis=2)
        if self._finds.any():
            self._look(np.square(spectrum.real) + np.square(spectrum.imag))
        killed = _widened(self._since < _HELD_FRAMES) | self._fixed
        wanted = np.where(killed, np.float32(0), np.float32(1))
        spectrum *= 0.5 * (self._gain + wanted)
        self._gain = wanted
        self._sum += scipy.fft.irfft(spectrum, _FRAME, axis=2)
        done: FloatBlock = np.float32(0.5) * self._sum[:, :, :_HOP]
        done[self._passes] = window[self._passes, :, :_HOP]
        self._sum[:, :, :-_HOP] = self._sum[:, :, _HOP:]
        self._sum[:, :, -_HOP:] = 0.0
        return done

    def _look(self, power: FloatBlock) -> None:
        """Notes where a tone stands."""
        self._powers[self._frames % _REMEMBERED] = power
        self._frames += 1
        self._since += 1
        if self._frames < _REMEMBERED:
            return
        lowest = self._powers.min(axis=0)
        mean = self._powers.mean(axis=0)
        padded = np.pad(lowest, ((0, 0), (0, 0), (_AROUND // 2, _AROUND // 2)), mode="reflect")
        medians = np.median(sliding_window_view(padded, _AROUND, axis=2)[:, :, self._places], axis=3)
        around = np.repeat(medians[:, :, :-1], _EVERY, axis=2)[:, :, : self._shape[2]]
        highest = lowest.copy()
        for step in range(1, _SIDE_BINS + 1):
            np.maximum(highest[:, :, step:], lowest[:, :, :-step], out=highest[:, :, step:])
            np.maximum(highest[:, :, :-step], lowest[:, :, step:], out=highest[:, :, :-step])
        is_tone = (lowest == highest) & (lowest > _STANDS_OUT * around) & (lowest > _STEADY * mean) & (lowest > 0.0)
        self._since[is_tone & self._finds[:, None, None]] = 0


def _widened(tones: Bools) -> Bools:
    """Each tone with the bins beside it."""
    wide = tones.copy()
    for step in range(1, _SIDE_BINS + 1):
        wide[:, :, step:] |= tones[:, :, :-step]
        wide[:, :, :-step] |= tones[:, :, step:]
    return wide
