"""Brings a stretch of a channel to what is measured: 12 kHz, its carrier near the middle, impulses and drift out of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from scipy import ndimage

from rxchain.identify.drift import without_drift
from rxchain.identify.neighbours import without_neighbours
from rxchain.identify.reference import mirror_fit
from rxchain.identify.short_time import RATE_HZ, narrow_series
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import ComplexBlock, Floats

REACH_HZ = 500.0  # how far from its nominal frequency a carrier is looked for

# Of a line far from the nominal frequency; in a short stretch the harmonics of one syllable are lines too.
_LINE_DB, _LINE_SHORT_DB, _SHORT_S = 15.0, 25.0, 2.5
_PIECE_S = 1.0
_BAND = 2.4  # times the reach: of the band in which a far carrier is looked for
_AROUND_HZ = 22.0
_LOUDEST, _OVER_LOUDEST = 0.99, 3.0  # an impulse stands so many times above the loudest hundredth
_AROUND_SAMPLES, _OVER_AROUND = 121, 5.0  # and so many times above what lies around it
_MIRRORED = 1.5
_SQUARE_DB = 9.0
_FLAT_SHARE = 0.49  # of the rate of a channel that is not much wider than what is measured
_QUIETEST = 0.08
_NEAR_HZ = 90.0  # what lies within is found by the measurement itself


@dataclass(frozen=True, slots=True)
class Prepared:
    """iq : complex64, (samples,) at 12 kHz. shift_hz : how far it was turned. impulse_share : share blanked. drift_hz_s : how
    fast its carrier moves, taken out about the middle.
    """

    iq: ComplexBlock
    shift_hz: float
    impulse_share: float
    drift_hz_s: float


def prepare_window(
    iq: ComplexBlock, rate_hz: float, reach_hz: float, keep_hz: tuple[float, float] | None = None
) -> Prepared:
    """A stretch of one channel, complex64, (samples,) at ``rate_hz``, made fit to be measured.

    reach_hz : how far from the middle its carrier may lie. keep_hz : the band that is its own; what neighbours put beside
    it is replaced by noise like that of the quietest parts.
    """
    blanked, share = blank_impulses(iq)
    wide = at_rate(blanked, rate_hz, keep_hz)
    shift_hz = _far_reference_hz(wide, reach_hz) if reach_hz > _NEAR_HZ else 0.0
    if shift_hz:
        wide = (wide * np.exp(-2j * np.pi * shift_hz / RATE_HZ * np.arange(len(wide)))).astype(np.complex64)
    own, drift_hz_s = without_drift(without_neighbours(wide))
    return Prepared(own, shift_hz, share, drift_hz_s)


def blank_impulses(iq: ComplexBlock) -> tuple[ComplexBlock, float]:
    """The stretch with its impulses at zero, and the share of it that they were."""
    size = np.abs(iq)
    is_loud = size > _OVER_LOUDEST * np.quantile(size, _LOUDEST)
    if not is_loud.any():
        return iq, 0.0
    around = ndimage.median_filter(size, _AROUND_SAMPLES, mode="nearest")
    is_impulse = is_loud & (size > _OVER_AROUND * around)
    if not is_impulse.any():
        return iq, 0.0
    is_impulse = ndimage.binary_dilation(is_impulse, iterations=2)
    return np.where(is_impulse, np.complex64(0), iq), float(is_impulse.mean())


def at_rate(iq: ComplexBlock, rate_hz: float, keep_hz: tuple[float, float] | None = None) -> ComplexBlock:
    """The stretch at 12 kHz; its floor is carried on where the channel is narrower, and beyond ``keep_hz``."""
    n, wanted = len(iq), round(len(iq) * RATE_HZ / rate_hz)
    spectrum = scipy.fft.fft(iq)
    half = min(n, wanted) // 2
    rest = min(n, wanted) - half
    kept = np.zeros(wanted, np.complex64)
    kept[:rest] = spectrum[:rest]
    kept[-half:] = spectrum[n - half :]
    frequency_hz = scipy.fft.fftfreq(wanted, 1.0 / RATE_HZ)
    is_foreign = np.abs(frequency_hz) > min(0.5 * RATE_HZ, _FLAT_SHARE * rate_hz)
    if keep_hz is not None:
        is_foreign |= (frequency_hz < keep_hz[0]) | (frequency_hz > keep_hz[1])
    if is_foreign.any():
        power = ndimage.uniform_filter1d(np.square(np.abs(kept)), max(1, n // 200), mode="wrap")
        inside = np.abs(frequency_hz) <= min(0.5 * RATE_HZ, _FLAT_SHARE * rate_hz)
        floor = np.sqrt(np.quantile(power[inside], _QUIETEST) / 2.0)
        draws = np.random.default_rng(1).standard_normal((2, int(is_foreign.sum()))) * floor
        kept[is_foreign] = draws[0] + 1j * draws[1]
    return np.asarray(scipy.fft.ifft(kept) * (wanted / n)).astype(np.complex64)


def _far_reference_hz(iq: ComplexBlock, reach_hz: float) -> float:
    """Where the carrier is, if it lies so far off that measuring would not find it; 0 where it does not."""
    line_hz, line_db = _strongest_line(iq, reach_hz)
    is_short = len(iq) < _SHORT_S * RATE_HZ
    if line_db > (_LINE_SHORT_DB if is_short else _LINE_DB):
        return line_hz if abs(line_hz) > _NEAR_HZ else 0.0
    if is_short:
        return 0.0
    centre_hz = _squared_centre_hz(iq, reach_hz)
    return 0.0 if centre_hz is None or abs(centre_hz) <= _NEAR_HZ else centre_hz


def _strongest_line(iq: ComplexBlock, reach_hz: float) -> tuple[float, float]:
    rate_hz = min(RATE_HZ, _BAND * (reach_hz + 2.0 * _AROUND_HZ))
    spectrum = np.asarray(scipy.fft.fft(iq[None], axis=1))
    series = narrow_series(spectrum, 0.49 * rate_hz, rate_hz)[0]
    size = int(_PIECE_S * rate_hz)
    window = np.hanning(size).astype(np.float32)
    spectra = scipy.fft.fft(sliding_window_view(series, size)[:: size // 4] * window, axis=1)
    power = np.square(spectra.real) + np.square(spectra.imag)
    logs = scipy.fft.fftshift(np.mean(np.log(power + 1e-20), axis=0, dtype=np.float64))
    frequency_hz = scipy.fft.fftshift(scipy.fft.fftfreq(size, 1.0 / rate_hz))
    around = round(_AROUND_HZ * _PIECE_S)
    inside = np.flatnonzero(np.abs(frequency_hz) <= reach_hz)
    inside = inside[(inside >= around) & (inside < size - around)]
    surroundings = np.median(sliding_window_view(logs, 2 * around + 1)[inside - around], axis=1)
    rise = logs[inside] - surroundings
    # A mean over few pieces scatters: neighbouring bins share a line, noise they do not.
    rise = ndimage.uniform_filter1d(rise, 3)
    best = int(np.argmax(rise))
    return float(frequency_hz[inside[best]]), float(4.343 * rise[best])


def _squared_centre_hz(iq: ComplexBlock, reach_hz: float) -> float | None:
    """The middle about which the stretch is mirrored, from the line of its square in quarter seconds; None if none."""
    rate_hz = min(RATE_HZ, 2.0 * _BAND * reach_hz)
    square = np.asarray(scipy.fft.fft((iq * iq)[None], axis=1))
    series = narrow_series(square, 0.49 * rate_hz, rate_hz)[0]
    size = int(0.25 * rate_hz)
    points = next_smooth(2 * size)
    window = np.hanning(size).astype(np.float32)
    pieces = sliding_window_view(series, size)[:: size // 2] * window
    power = np.sum(np.square(np.abs(scipy.fft.fft(pieces, points, axis=1))), axis=0, dtype=np.float64)
    centre_hz = scipy.fft.fftfreq(points, 1.0 / rate_hz) / 2.0
    left: Floats = np.where(np.abs(centre_hz) <= reach_hz, power, 0.0)
    candidates = []
    for _ in range(4):
        top = int(np.argmax(left))
        if 10.0 * np.log10(left[top] / (np.median(power) + 1e-30) + 1e-30) > _SQUARE_DB:
            candidates.append(float(centre_hz[top]))
        left[np.abs(centre_hz - centre_hz[top]) < 25.0] = 0.0
    if not candidates:
        return None
    fits = mirror_fit(iq, np.array(candidates))
    return candidates[int(np.argmax(fits))] if np.max(fits) > _MIRRORED else None
