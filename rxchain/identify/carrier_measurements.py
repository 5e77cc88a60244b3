"""What the line and the envelope say: level and keying of a carrier, peaks, constancy, the stereo pilot."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.identify.reference import SLOW_HZ, References
from rxchain.identify.short_time import BIN_HZ, FRAME_HZ, RATE_HZ, ChannelWindows, decibels, hann_smoothed
from rxchain.streams import Floats

_CARRIER_S, _KEYING_S = 0.25, 0.03
_LINE_HALF_HZ = 60.0
_MOMENT_PIECE = 3_000  # samples: short enough that fading stands still
_PILOT_HZ = 25.0  # 47 CFR 73.128
_PILOT_POINTS = 8


def carrier_measurements(windows: ChannelWindows, found: References) -> dict[str, Floats]:
    """The measurements of each channel's line and envelope, (channels,) each, by name."""
    t = np.arange(found.slow.shape[1]) / SLOW_HZ
    upright = found.slow * np.exp(-2j * np.pi * found.line_hz[:, None] * t)
    floor = windows.floor
    smooth_power = np.mean(np.square(np.abs(hann_smoothed(upright, _CARRIER_S * SLOW_HZ))), axis=1)
    carrier = np.maximum(smooth_power - floor * 6.0 / RATE_HZ, 1e-6)
    envelope2 = np.square(np.abs(np.asarray(scipy.fft.ifft(windows.spectrum * windows.gain, axis=1)))).astype(
        np.float64
    )
    peak = np.quantile(envelope2, 1.0 - 4.0 / (windows.seconds * 1_000.0), axis=1) - 2.0 * windows.noise
    occupied = np.maximum(windows.smoothed - 1.1 * floor[:, None], 0.0)
    occupied[np.abs(FRAME_HZ[None, :] - found.line_hz[:, None]) < _LINE_HALF_HZ] = 0.0
    width_hz = np.sum(occupied, axis=1) ** 2 / (np.sum(occupied**2, axis=1) + 1e-12) * BIN_HZ
    return {
        "line": found.line_db,
        "key": _keying_db(upright, floor),
        "c_pep": decibels(carrier / np.maximum(peak, 1e-6)),
        "line_out": _outside_db(windows, found.line_hz),
        "occ": np.log10(width_hz + 10.0),
        "kappa": np.log(_fourth_moment(envelope2, windows.noise)),
        "pilot25": _pilot_db(upright, carrier),
    }


def _keying_db(upright: np.ndarray, floor: Floats) -> Floats:
    """Swing of the line's power within half seconds: keying, which slow fading is not."""
    fast = np.square(np.abs(hann_smoothed(upright, _KEYING_S * SLOW_HZ))) + (floor * 5.0 / RATE_HZ)[:, None]
    half = int(0.5 * SLOW_HZ)
    ranked = np.sort(sliding_window_view(fast, half, axis=1)[:, :: half // 2], axis=2)
    return np.asarray(np.median(decibels(ranked[:, :, int(0.9 * half)] / ranked[:, :, int(0.1 * half)]), axis=1))


def _outside_db(windows: ChannelWindows, line_hz: Floats) -> Floats:
    """Power away from the line, through the gain, over the power at it."""
    n = windows.iq.shape[1]
    is_inside = np.abs(windows.frequency_hz[None, :] - line_hz[:, None]) < _LINE_HALF_HZ
    power = np.square(np.abs(windows.spectrum)).astype(np.float64) / n**2
    inside = np.sum(power * is_inside, axis=1) - windows.floor * np.sum(is_inside, axis=1) / n
    outside = np.sum(power * windows.gain * ~is_inside, axis=1)
    return decibels(np.maximum(outside, 0.01 * windows.floor) / np.maximum(inside, 1e-6))


def _fourth_moment(envelope2: Floats, noise: Floats) -> Floats:
    """E|s|^4 / (E|s|^2)^2 in pieces of a quarter second, weighted by power, complex Gaussian noise taken out."""
    n = envelope2.shape[1] // _MOMENT_PIECE
    pieces = envelope2[:, : n * _MOMENT_PIECE].reshape(len(envelope2), n, _MOMENT_PIECE)
    second, fourth = pieces.mean(axis=2), np.square(pieces).mean(axis=2)
    noise = noise[:, None]
    signal = np.maximum(second - noise, 0.15 * second) + 1e-9
    ratio = np.clip((fourth - 4.0 * signal * noise - 2.0 * noise**2) / signal**2, 0.5, 12.0)
    return np.asarray(np.sum(ratio * signal, axis=1) / np.sum(signal, axis=1))


def _pilot_db(upright: np.ndarray, carrier: Floats) -> Floats:
    """A 25 Hz tone in the carrier's phase, measured against the carrier itself, so that slow fading cancels."""
    near = hann_smoothed(upright, 0.1 * SLOW_HZ)
    phase = (upright * np.conj(near) / (np.square(np.abs(near)) + 0.05 * carrier[:, None])).imag
    n = phase.shape[1]
    spectrum = scipy.fft.rfft(phase * np.hanning(n), _PILOT_POINTS * n, axis=1)
    frequency_hz = scipy.fft.rfftfreq(_PILOT_POINTS * n, 1.0 / SLOW_HZ)
    beyond_hz = np.abs(frequency_hz - _PILOT_HZ)
    beside = (beyond_hz > 2.0) & (beyond_hz < 8.0)
    power = np.square(np.abs(spectrum))
    return decibels(power[:, beyond_hz < 0.6].max(axis=1) / np.mean(power[:, beside], axis=1))
