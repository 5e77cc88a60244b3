"""Pitch of a frame, and where its harmonics lie: the complex cepstrum of one side of the spectrum.

A voiced frame has lines at ``d + k f0``. The transform of its log spectrum over the positive frequencies alone,

    C(tau) = sum over f of G(f) exp(-2 pi j f tau),

peaks in magnitude at ``tau = 1 / f0``, and there its phase is ``-2 pi d tau``: the offset ``d``, known modulo ``f0``. The
cepstrum for pitch is A. M. Noll's ("Cepstrum pitch determination", J. Acoust. Soc. Am. 41 (1967) 293-309), who takes
both sides and so keeps the magnitude alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.speech_frames import HIGH_HZ, LOW_HZ
from rxchain.streams import FloatBlock, Floats

_PERIODS_S = np.arange(2.3e-3, 12.8e-3, 0.2e-3)  # pitches of 78 to 435 Hz
_DETREND_HZ = (
    100.0  # half-width of each of two running means; one alone ripples in tau, and pulls the peak by 1 to 5 Hz
)
_TAPER_HZ = 80.0
_ENVELOPE_TERMS = 10  # slow cosines that are no part of the energy a peak is measured against
_TINY = 1e-9


@dataclass(frozen=True, slots=True)
class PitchPeaks:
    """The highest peak of each channel's cepstrum, float32, (channels,).

    period_s : where it lies. phase_cycles : ``offset * period``, modulo one.
    height : its magnitude over the greatest possible one: about 0.2 for noise, 0.3 to 0.65 for voiced frames.
    """

    period_s: FloatBlock
    phase_cycles: FloatBlock
    height: FloatBlock


class PitchCepstrum:
    """Everything linear is one matrix: detrending, taper, transform, and the undoing of the window's own decay."""

    def __init__(self, frequency_hz: Floats, frame_s: float) -> None:
        self._transform, self._envelope, self._weights = _matrices(tuple(frequency_hz.tolist()), frame_s)

    def peaks(self, excess: FloatBlock) -> PitchPeaks:
        """The peaks of a frame's log spectra, (channels, bins)."""
        cepstrum = excess @ self._transform
        real, imag = cepstrum[:, : len(_PERIODS_S)], cepstrum[:, len(_PERIODS_S) :]
        power = real * real + imag * imag
        rows = np.arange(len(power))
        peak = 1 + np.argmax(power[:, 1:-1], axis=1)
        before, top, after = (np.sqrt(power[rows, peak + step]) for step in (-1, 0, 1))
        shift = np.clip(0.5 * (before - after) / np.minimum(before - 2.0 * top + after, -_TINY), -0.5, 0.5)
        beside = peak + np.where(shift >= 0.0, 1, -1)
        turn_rad = np.arctan2(
            imag[rows, beside] * real[rows, peak] - real[rows, beside] * imag[rows, peak],
            real[rows, beside] * real[rows, peak] + imag[rows, beside] * imag[rows, peak],
        )
        phase_rad = np.arctan2(imag[rows, peak], real[rows, peak]) + np.abs(shift) * turn_rad
        envelope = excess @ self._envelope
        energy = (excess * excess) @ self._weights - excess.shape[1] * (envelope * envelope).sum(axis=1)
        return PitchPeaks(
            period_s=(_PERIODS_S[peak] + shift * (_PERIODS_S[1] - _PERIODS_S[0])).astype(np.float32),
            phase_cycles=(phase_rad / (-2.0 * np.pi)).astype(np.float32),
            height=(top - 0.25 * (before - after) * shift) / np.sqrt(np.maximum(energy, _TINY)),
        )


@lru_cache(maxsize=8)
def _matrices(frequency_hz: tuple[float, ...], frame_s: float) -> tuple[FloatBlock, FloatBlock, FloatBlock]:
    """Transform (bins, 2 periods), slow cosines (bins, terms), and weights of the energy (bins,)."""
    f_hz = np.array(frequency_hz)
    n_bins = len(f_hz)
    taper = np.clip(np.minimum(f_hz - LOW_HZ + 20.0, HIGH_HZ - f_hz) / _TAPER_HZ, 0.1, 1.0)
    reach = round(_DETREND_HZ / (f_hz[1] - f_hz[0]))
    near = np.abs(np.subtract.outer(np.arange(n_bins), np.arange(n_bins))) <= reach
    mean = near / near.sum(axis=1, keepdims=True)
    detrended = taper[:, None] * (np.eye(n_bins) - mean @ mean)
    transform: NDArray[np.complex128] = np.exp(-2j * np.pi * np.outer(_PERIODS_S, f_hz)) @ detrended
    transform /= _window_decay(_PERIODS_S / frame_s)[:, None]
    cosines = np.cos(np.pi * np.outer((np.arange(n_bins) + 0.5) / n_bins, np.arange(_ENVELOPE_TERMS)))
    orthogonal = taper[:, None] * np.linalg.qr(taper[:, None] * cosines)[0]
    return (
        np.concatenate([transform.real, transform.imag]).T.astype(np.float32),
        orthogonal.astype(np.float32),
        (taper**2 * n_bins).astype(np.float32),
    )


def _window_decay(lag: Floats) -> Floats:
    """Autocorrelation of the squared-sine window at lags in windows: lines as wide as the window's fade with ``tau``."""
    cosine, sine = np.cos(2.0 * np.pi * lag), np.sin(2.0 * np.pi * lag)
    return np.asarray((1.0 - lag) * (2.0 + cosine) / 3.0 + sine / (2.0 * np.pi))
