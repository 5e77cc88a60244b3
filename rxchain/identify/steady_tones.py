"""How far a channel's message is steady tones, which show less of the modulation than a voice does.

One tone on one side is a carrier, two are two carriers or a double sideband: names given from such a message need much
more evidence than others.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.identify.reference import References
from rxchain.identify.short_time import FLAT_SHARE, RATE_HZ, ChannelWindows
from rxchain.streams import Floats

STEADY = 0.6  # share above which a message is called tones; voices and music reach 0.5, held tones 0.6 to 0.98
_PIECE = 6_000  # samples: half a second, in which a voice moves by more than a bin
_LINES, _HALF_BINS = 4, 2
_BESIDE_HZ = 130.0  # of the carrier: its hum is no message
_OVER_FLOOR = 1.3


def steady_tone_shares(windows: ChannelWindows, found: References) -> Floats:
    """Share of the power away from the carrier that lies in the four strongest lines of half a second, (channels,), 0 to 1.
    Noise counts as power, so that what is under it has no tones.
    """
    taper = np.hanning(_PIECE + 1)[:-1].astype(np.float32)
    pieces = sliding_window_view(windows.iq, _PIECE, axis=1)[:, :: _PIECE // 2] * taper
    spectra = scipy.fft.fft(pieces, axis=2)
    power = np.mean(np.square(spectra.real) + np.square(spectra.imag), axis=1, dtype=np.float64) / np.sum(taper**2)
    frequency_hz = scipy.fft.fftfreq(_PIECE, 1.0 / RATE_HZ)
    is_message = np.abs(frequency_hz)[None, :] < FLAT_SHARE * RATE_HZ
    is_message = is_message & ~(
        found.is_line[:, None] & (np.abs(frequency_hz[None, :] - found.hz[:, None]) < _BESIDE_HZ)
    )
    floor = windows.floor[:, None]
    total = np.sum(np.maximum(power - floor, 0.0) * is_message, axis=1) + 1e-30
    left = np.maximum(power - _OVER_FLOOR * floor, 0.0) * is_message
    rows, around = np.arange(len(left))[:, None], np.arange(-_HALF_BINS, _HALF_BINS + 1)
    in_lines = np.zeros(len(left))
    for _ in range(_LINES):
        bins = (np.argmax(left, axis=1)[:, None] + around) % _PIECE
        in_lines += left[rows, bins].sum(axis=1)
        left[rows, bins] = 0.0
    return np.asarray(in_lines / total)
