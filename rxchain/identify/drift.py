"""Takes a steady drift of the carrier out of a stretch, so that its line is a line again.

The spectrum of each short piece is shifted back by what a drift would have moved it since the middle; the drift at which
the pieces agree best on a line is the true one. First for the signal itself, then for its square.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.identify.short_time import RATE_HZ, narrow_series
from rxchain.streams import ComplexBlock, FloatBlock, Floats

_FASTEST_HZ_S, _STEP_HZ_S = 8.0, 0.25
_LEAST_HZ_S = 0.5  # slower drifts spread a line over no more than the measurement allows for
_LINE_RATE_HZ, _LINE_PIECE = 500.0, 500
_SQUARE_RATE_HZ, _SQUARE_PIECE = 1_200.0, 300
_POINTS = 1_024
# How far the straightened line must stand out, and by how much more than without a drift, nepers a piece: the pitch of a
# voice gains up to 0.8 in the signal and up to 0.2 in its square, a drift of 3 Hz/s from 4 and from 0.7.
_RISE, _LINE_GAIN, _SQUARE_GAIN = 3.0, 1.2, 0.5
_SHORTEST_S = 2.5


def without_drift(iq: ComplexBlock) -> tuple[ComplexBlock, float]:
    """A stretch at 12 kHz, complex64, (samples,), with the drift of its carrier taken out about its middle, and that drift
    in hertz a second; 0 where there is none that is sure.
    """
    if len(iq) < _SHORTEST_S * RATE_HZ:
        return iq, 0.0
    slow = narrow_series(np.asarray(scipy.fft.fft(iq[None], axis=1)), 0.49 * _LINE_RATE_HZ, _LINE_RATE_HZ)[0]
    power, apart_s = _pieces(slow, _LINE_PIECE, _LINE_RATE_HZ)
    smooth = (power + np.roll(power, 1, axis=1) + np.roll(power, -1, axis=1)) / 3.0
    drift, rise, gain = _straightest(np.log(smooth + 1e-15), apart_s, _LINE_RATE_HZ / _POINTS, 1.0)
    if not (rise > _RISE and gain > _LINE_GAIN):
        square = np.asarray(scipy.fft.fft((iq * iq)[None], axis=1))
        wide = narrow_series(square, 0.49 * _SQUARE_RATE_HZ, _SQUARE_RATE_HZ)[0]
        power, apart_s = _pieces(wide, _SQUARE_PIECE, _SQUARE_RATE_HZ)
        drift, rise, gain = _straightest(np.log(power + 1e-20), apart_s, _SQUARE_RATE_HZ / _POINTS, 2.0)
        if not (rise > _RISE and gain > _SQUARE_GAIN):
            return iq, 0.0
    return (_straightened(iq, drift), drift) if abs(drift) >= _LEAST_HZ_S else (iq, 0.0)


def _straightened(iq: ComplexBlock, drift: float) -> ComplexBlock:
    """The stretch with the drift taken out about its middle."""
    t = (np.arange(len(iq)) - len(iq) / 2.0) / RATE_HZ
    turned: ComplexBlock = (iq * np.exp(-1j * np.pi * drift * t * t)).astype(np.complex64)
    return turned


def _pieces(series: ComplexBlock, size: int, rate_hz: float) -> tuple[FloatBlock, float]:
    """Power spectra of half-overlapping pieces, (pieces, points), lowest frequency first, and the time between them."""
    pieces = sliding_window_view(series, size)[:: size // 2] * np.hanning(size).astype(np.float32)
    spectra = scipy.fft.fftshift(scipy.fft.fft(pieces, _POINTS, axis=1), axes=1)
    return np.square(np.abs(spectra)).astype(np.float32), size / 2 / rate_hz


def _straightest(values: FloatBlock, apart_s: float, bin_hz: float, power: float) -> tuple[float, float, float]:
    """The drift at which the logarithms of the pieces' powers, (pieces, points), add up to the highest line; how far it
    stands out, and how much further than unshifted. power : of the signal whose pieces they are.
    """
    n = len(values)
    from_middle_s = (np.arange(n) - (n - 1) / 2.0) * apart_s
    near = np.arange(_POINTS // 4, 3 * _POINTS // 4)  # the outer bins are wanted by none but the fastest drifts

    def highest(drifts: Floats) -> Floats:
        shifts = np.rint(power * drifts[:, None] * from_middle_s / bin_hz).astype(np.int64)
        columns = (near + shifts[:, :, None]) % _POINTS
        return np.asarray(np.take_along_axis(values[None], columns, axis=2).mean(axis=1).max(axis=1))

    coarse = np.arange(-_FASTEST_HZ_S, _FASTEST_HZ_S + 1e-9, 2.0 * _STEP_HZ_S)
    sums = highest(coarse)
    still = float(sums[len(coarse) // 2])
    fine = coarse[int(np.argmax(sums))] + _STEP_HZ_S * np.arange(-1, 2)
    sums = highest(fine)
    best = int(np.argmax(sums))
    return float(fine[best]), float(sums[best] - np.median(values.mean(axis=0))), float(sums[best]) - still
