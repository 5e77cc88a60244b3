"""What all measurements start from: short-time spectra, the noise floor, and the gain that keeps what is occupied."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy import ndimage

from rxchain.streams import Bools, ComplexBlock, FloatBlock, Floats

RATE_HZ = 12_000.0
FRAME, HOP = 512, 256  # 43 ms Hann frames, bins of 23.4 Hz
WINDOW: FloatBlock = np.hanning(FRAME + 1)[:FRAME].astype(np.float32)
WINDOW_POWER = float(np.sum(WINDOW**2))
FLAT_SHARE = 0.47  # of the rate: what the channel's filter leaves flat on either side
BIN_HZ = RATE_HZ / FRAME
FRAME_HZ: Floats = np.fft.fftfreq(FRAME, 1.0 / RATE_HZ).astype(np.float64)
INNER: Bools = np.abs(FRAME_HZ) < FLAT_SHARE * RATE_HZ

_SMOOTHED_BINS = 9
_FLOOR_QUANTILE = 0.08  # so much of the channel must be free of signal
_OCCUPIED = 1.15  # times the floor


@dataclass(frozen=True, slots=True)
class ChannelWindows:
    """A window of several channels, scaled to a mean power of 1.

    iq : complex64, (channels, samples) at 12 kHz. spectrum : complex64, its whole transform; frequency_hz : its bins.
    smoothed : (channels, FRAME): mean power spectrum over 9 bins. floor : (channels,): noise power of the whole channel.
    gain : (channels, samples): keeps the occupied part of ``spectrum``; frame_gain : the same at the frames' bins.
    noise : (channels,): noise power that passes ``gain``. is_empty : channels with nothing finite or nothing at all.
    """

    iq: ComplexBlock
    spectrum: ComplexBlock
    frequency_hz: Floats
    smoothed: Floats
    floor: Floats
    gain: FloatBlock
    frame_gain: Floats
    noise: Floats
    is_empty: Bools

    @property
    def seconds(self) -> float:
        """Length of the window."""
        return float(self.iq.shape[1] / RATE_HZ)


def short_time(iq: ComplexBlock) -> ComplexBlock:
    """Hann frames' transforms, complex64, (channels, frames, FRAME); frames overlap by half."""
    return np.asarray(scipy.fft.fft(sliding_window_view(iq, FRAME, axis=1)[:, ::HOP] * WINDOW, axis=2))


def prepare(iq: NDArray[np.complexfloating]) -> ChannelWindows:
    """Scale the windows and find their floors; where there is nothing, a fixed piece of noise stands in."""
    power = np.mean(np.square(np.abs(iq.astype(np.complex128))), axis=1)
    is_empty = ~(np.isfinite(power) & (power > 1e-30))
    scaled = np.array(iq, np.complex64)
    if is_empty.any():
        draws = np.random.default_rng(1).standard_normal((2, iq.shape[1]))
        scaled[is_empty] = draws[0] + 1j * draws[1]
        power = np.where(is_empty, 2.0, power)
    scaled *= (1.0 / np.sqrt(power))[:, None].astype(np.float32)
    frames = short_time(scaled)
    density = np.mean(np.square(frames.real) + np.square(frames.imag), axis=1, dtype=np.float64) / WINDOW_POWER
    smoothed = ndimage.uniform_filter1d(density, _SMOOTHED_BINS, axis=1, mode="wrap")
    # The quantile of so many averages lies below their mean by this much.
    deviations = 1.4 / np.sqrt(_SMOOTHED_BINS / 1.5 * frames.shape[1] / 1.45)
    floor = np.maximum(np.quantile(smoothed[:, INNER], _FLOOR_QUANTILE, axis=1) / (1.0 - deviations), 1e-12)
    frame_gain = np.clip((smoothed - _OCCUPIED * floor[:, None]) / np.maximum(smoothed, 1e-12), 0.0, 1.0) * INNER
    frequency_hz: Floats = np.fft.fftfreq(iq.shape[1], 1.0 / RATE_HZ).astype(np.float64)
    place = frequency_hz / BIN_HZ
    below = np.floor(place).astype(np.int64)
    part = (place - below).astype(np.float32)
    kept = frame_gain.astype(np.float32)
    gain = kept[:, below % FRAME] * (1.0 - part) + kept[:, (below + 1) % FRAME] * part
    noise = floor * np.mean(np.square(gain, dtype=np.float64), axis=1)
    spectrum = np.asarray(scipy.fft.fft(scaled, axis=1))
    return ChannelWindows(scaled, spectrum, frequency_hz, smoothed, floor, gain, frame_gain, noise, is_empty)


def narrow_series(spectrum: ComplexBlock, half_hz: float, rate_hz: float) -> ComplexBlock:
    """The band 0 ± ``half_hz`` of whole-window spectra, (channels, n), as series at ``rate_hz``."""
    n = spectrum.shape[1]
    m = round(n * rate_hz / RATE_HZ)
    half = min(int(half_hz * n / RATE_HZ), m // 2 - 1)
    kept = np.zeros((len(spectrum), m), np.complex64)
    kept[:, : half + 1] = spectrum[:, : half + 1]
    kept[:, -half:] = spectrum[:, -half:]
    return np.asarray(scipy.fft.ifft(kept, axis=1) * np.float32(m / n))


def hann_smoothed(values: NDArray[np.inexact], width: float) -> NDArray[np.inexact]:
    """Running weighted mean along the last axis; at the ends over what there is."""
    taps = np.hanning(max(3, int(width) | 1) + 2)[1:-1]
    weight = ndimage.convolve1d(np.ones(values.shape[-1]), taps, mode="constant")
    return np.asarray(ndimage.convolve1d(values, taps, axis=-1, mode="constant") / weight)


def decibels(power: Floats) -> Floats:
    """Ten times the logarithm, no lower than -120 dB."""
    return np.asarray(10.0 * np.log10(np.maximum(power, 1e-12)))
