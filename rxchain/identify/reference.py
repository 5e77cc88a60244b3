"""The reference frequency of each channel: a persistent line, else the line of the squared signal, else the middle.

A carrier is a line that stays: the mean of the *logarithm* of the spectrum counts bursts of speech little. A suppressed
carrier shows in the square of the signal, at twice its frequency, in pieces short enough for fading. A hum or whistle in
the message is a line too; whether the channel is mirrored about a candidate tells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.identify.short_time import (
    RATE_HZ,
    ChannelWindows,
    decibels,
    hann_smoothed,
    narrow_series,
    short_time,
)
from rxchain.streams import Bools, ComplexBlock, Floats

SLOW_HZ = 500.0  # rate of the narrow series about the middle of the channel
SIDE_BINS = np.arange(3, 213)  # 70 Hz to 5 kHz from the reference

_POINTS = 1024
_AROUND_BINS = 45  # +-22 Hz: what a line must stand out from
_LINE_DB, _LINE_SHORT_DB, _SHORT_S = 9.0, 12.0, 2.5
_SURE_LINE_DB = 25.0
_SQUARE_DB = 8.0
_SQUARED_RATE_HZ, _SQUARED_PIECE = 600.0, 150
_CANDIDATES, _APART_HZ, _RUNNER_UP = 3, 25.0, 0.2
_MIRRORED, _MIRRORED_MORE = 1.4, 0.3  # 2 is perfect; 0.8 to 0.9 where the candidate is wrong


@dataclass(frozen=True, slots=True)
class References:
    """What was found; all (channels,).

    hz : the reference. is_line, is_square : where it comes from; neither: the middle of the channel.
    line_hz, line_db : the strongest persistent line and its prominence, whether taken or not. square_db : prominence of
    the squared signal's line. non_circularity : its size at the reference. agreement : share of it at the line.
    slow : complex64, (channels, n) at 500 Hz: the band about the middle.
    """

    hz: Floats
    is_line: Bools
    is_square: Bools
    line_hz: Floats
    line_db: Floats
    square_db: Floats
    non_circularity: Floats
    agreement: Floats
    slow: ComplexBlock


@dataclass(frozen=True, slots=True)
class _Squared:
    candidates_hz: Floats  # (channels, 3), nan where there is none
    size: Floats
    prominence_db: Floats
    size_at_line: Floats


def find_references(windows: ChannelWindows, reach_hz: float) -> References:
    """The reference of every channel, looked for within ±``reach_hz`` (at most 240 Hz)."""
    slow = narrow_series(windows.spectrum, 0.49 * SLOW_HZ, SLOW_HZ)
    line_hz, line_db = persistent_line(slow, windows.floor, reach_hz)
    spectrum = windows.spectrum * windows.gain
    spectrum[np.abs(windows.frequency_hz[None, :] - line_hz[:, None]) < 10.0] = 0.0
    rest = np.asarray(scipy.fft.ifft(spectrum, axis=1))
    squared = _squared_line(rest, line_hz, reach_hz)
    hz, size = np.zeros(len(line_hz)), squared.size.copy()
    is_line = line_db > (_LINE_DB if windows.seconds > _SHORT_S else _LINE_SHORT_DB)
    is_square = ~is_line & (squared.prominence_db > _SQUARE_DB)
    for row in np.flatnonzero(squared.prominence_db > _SQUARE_DB):
        candidates_hz = squared.candidates_hz[row][np.isfinite(squared.candidates_hz[row])]
        if not is_line[row]:
            hz[row] = _most_mirrored(windows.iq[row], candidates_hz)[0] if len(candidates_hz) > 1 else candidates_hz[0]
        elif line_db[row] < _SURE_LINE_DB:
            apart_hz = candidates_hz[np.abs(candidates_hz - line_hz[row]) > 4.0]
            if len(apart_hz):
                best_hz, fit = _most_mirrored(windows.iq[row], apart_hz)
                at_line = _most_mirrored(windows.iq[row], line_hz[row : row + 1])[1]
                if fit > max(_MIRRORED, at_line + _MIRRORED_MORE):
                    hz[row], is_line[row], is_square[row] = best_hz, False, True
    hz[is_line], size[is_line] = line_hz[is_line], squared.size_at_line[is_line]
    agreement = squared.size_at_line / (squared.size + 1e-9)
    return References(hz, is_line, is_square, line_hz, line_db, squared.prominence_db, size, agreement, slow)


def persistent_line(slow: ComplexBlock, floor: Floats, reach_hz: float) -> tuple[Floats, Floats]:
    """Frequency and prominence in dB of each channel's most persistent line within ±``reach_hz``; both (channels,)."""
    size = min(int(SLOW_HZ), slow.shape[1])
    window = np.hanning(size).astype(np.float32)
    pieces = sliding_window_view(slow, size, axis=1)[:, :: max(1, size // 4)]
    spectra = scipy.fft.fftshift(scipy.fft.fft(pieces * window, _POINTS, axis=2), axes=2)
    power = (np.square(spectra.real) + np.square(spectra.imag)) / np.sum(window**2)
    power = (power + np.roll(power, 1, axis=2) + np.roll(power, -1, axis=2)) / 3.0
    logs: Floats = np.asarray(np.mean(np.log(power + 1e-15), axis=1, dtype=np.float64))
    frequency_hz = scipy.fft.fftshift(scipy.fft.fftfreq(_POINTS, 1.0 / SLOW_HZ))
    inside = np.flatnonzero(np.abs(frequency_hz) < min(reach_hz, 0.5 * SLOW_HZ - 26.0))
    surroundings = np.median(sliding_window_view(logs, 2 * _AROUND_BINS + 1, axis=1)[:, inside - _AROUND_BINS], axis=2)
    rise = logs[:, inside] - np.maximum(surroundings, np.log(floor)[:, None] - 0.3)
    best = np.argmax(rise, axis=1)
    rows, top = np.arange(len(slow)), inside[best]
    left, middle, right = (logs[rows, top + step] for step in (-1, 0, 1))
    curvature = np.minimum(left - 2.0 * middle + right, -1e-9)
    line_hz = frequency_hz[top] + np.clip(0.5 * (left - right) / curvature, -1.0, 1.0) * SLOW_HZ / _POINTS
    t = np.arange(slow.shape[1]) / SLOW_HZ
    upright = hann_smoothed(slow * np.exp(-2j * np.pi * line_hz[:, None] * t), 0.25 * SLOW_HZ)
    step = 25
    advance = np.angle(np.sum(upright[:, step:] * np.conj(upright[:, :-step]), axis=1))
    return line_hz + advance / (2.0 * np.pi * step / SLOW_HZ), 4.343 * rise[rows, best]


def mirror_fit(iq: ComplexBlock, reference_hz: Floats) -> Floats:
    """How well the two sides of a reference agree in magnitude and, blind to sign, in phase over the strongest cells.

    iq : (samples,), one channel; reference_hz : (candidates,). Returns (candidates,); 2 is perfect.
    """
    t = np.arange(len(iq)) / RATE_HZ
    turned = (iq * np.exp(-2j * np.pi * reference_hz[:, None] * t)).astype(np.complex64)
    frames = short_time(turned)
    upper, lower = frames[:, :, SIDE_BINS], frames[:, :, -SIDE_BINS]
    product = upper * lower
    size = np.abs(product) + 1e-12
    parts = np.square(np.abs(upper)), np.square(np.abs(lower)), product * product / size, size
    above, below, squared, sizes = (_pooled(part, 8, 10) for part in parts)
    fits = []
    for a, b, q, m in zip(above, below, squared, sizes, strict=True):
        strong = a + b >= np.quantile(a + b, 0.9)
        fits.append(np.sum(m[strong]) / np.sum(np.sqrt(a * b)[strong]) + np.sum(np.abs(q[strong])) / np.sum(m[strong]))
    return np.array(fits)


def _most_mirrored(iq: ComplexBlock, candidates_hz: Floats) -> tuple[float, float]:
    fits = mirror_fit(iq, candidates_hz)
    return float(candidates_hz[np.argmax(fits)]), float(np.max(fits))


def _pooled(cells: ComplexBlock, frames: int, bins: int) -> ComplexBlock:
    n, n_frames, n_bins = cells.shape
    whole = cells[:, : n_frames // frames * frames]
    return np.asarray(whole.reshape(n, n_frames // frames, frames, n_bins // bins, bins).sum(axis=(2, 4)))


def _squared_line(rest: ComplexBlock, line_hz: Floats, reach_hz: float) -> _Squared:
    """The squared signal in pieces of a quarter of a second: where its line is and how large, against all there is."""
    rate_hz, piece = _SQUARED_RATE_HZ, _SQUARED_PIECE
    square = narrow_series(np.asarray(scipy.fft.fft(rest * rest, axis=1), np.complex64), 0.49 * rate_hz, rate_hz)
    energy = np.square(rest.real) + np.square(rest.imag)
    power = narrow_series(np.asarray(scipy.fft.fft(energy.astype(np.complex64), axis=1)), 0.49 * rate_hz, rate_hz).real
    window = np.hanning(piece).astype(np.float32)
    pieces = sliding_window_view(square, piece, axis=1)[:, :: piece // 2]
    weights = np.maximum(np.sum(sliding_window_view(power, piece, axis=1)[:, :: piece // 2] * window, axis=2), 0.0)
    spectra = scipy.fft.fftshift(scipy.fft.fft(pieces * window, _POINTS, axis=2), axes=2)
    sizes = np.sum(np.square(spectra.real, dtype=np.float64) + np.square(spectra.imag, dtype=np.float64), axis=1)
    sizes /= np.sum(weights.astype(np.float64) ** 2, axis=1)[:, None] + 1e-12
    frequency_hz = scipy.fft.fftshift(scipy.fft.fftfreq(_POINTS, 1.0 / rate_hz)) / 2.0
    left = np.where(np.abs(frequency_hz) < reach_hz, sizes, 0.0)
    best = left.max(axis=1)
    candidates_hz = np.full((len(rest), _CANDIDATES), np.nan)
    for k in range(_CANDIDATES):  # the pitch of a voice puts side lines beside the true one
        top = np.argmax(left, axis=1)
        is_good = left.max(axis=1) > (_RUNNER_UP * best if k else 0.0)
        candidates_hz[:, k] = np.where(is_good, frequency_hz[top], np.nan)
        left[np.abs(frequency_hz[None, :] - frequency_hz[top][:, None]) < _APART_HZ] = 0.0
    near = np.abs(frequency_hz[None, :] - line_hz[:, None]) < 2.5
    at_line = np.sqrt(np.max(np.where(near, sizes, 0.0), axis=1))
    return _Squared(
        candidates_hz, np.sqrt(best), decibels(best / (np.median(sizes, axis=1) + 1e-12)), np.asarray(at_line)
    )
