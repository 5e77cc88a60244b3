"""Linear-phase filters by the window method; every design is symmetric about its middle tap.

A filter of ``n`` taps delays by ``(n - 1) / 2`` samples, a whole number where ``n`` is odd. Frequencies are in hertz at
the given rate. Kaiser's formulas: J. F. Kaiser, "Nonrecursive digital filter design using the I0-sinh window function",
Proc. IEEE ISCAS 1974, 20-23.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Floats

ComplexTaps = NDArray[np.complex128]


def kaiser_beta(attenuation_db: float) -> float:
    """Kaiser's window parameter for a stopband that far down.

    >>> round(kaiser_beta(80.0), 3)
    7.857
    """
    if attenuation_db > 50.0:
        return 0.1102 * (attenuation_db - 8.7)
    if attenuation_db >= 21.0:
        return float(0.5842 * (attenuation_db - 21.0) ** 0.4 + 0.07886 * (attenuation_db - 21.0))
    return 0.0


def kaiser_transition(n_taps: int, attenuation_db: float) -> float:
    """Width of the transition from pass to stop, in cycles per sample, that a Kaiser design of this length needs.

    >>> round(kaiser_transition(65, 80.0) * 12_000.0)
    941
    """
    return (attenuation_db - 7.95) / (2.285 * 2.0 * np.pi * (n_taps - 1))


def kaiser_taps(transition: float, attenuation_db: float) -> int:
    """Odd length of a Kaiser design with that transition, in cycles per sample.

    >>> kaiser_taps(941.0 / 12_000.0, 80.0)
    65
    """
    n_taps = int(np.ceil((attenuation_db - 7.95) / (2.285 * 2.0 * np.pi * transition))) + 1
    return n_taps | 1


def lowpass(n_taps: int, cutoff_hz: float, rate_hz: float, attenuation_db: float) -> Floats:
    """Low-pass with unit gain at 0 Hz; ``cutoff_hz`` is its -6 dB point, the middle of the transition."""
    taps = _sinc(n_taps, cutoff_hz / rate_hz) * np.kaiser(n_taps, kaiser_beta(attenuation_db))
    return np.asarray(taps / taps.sum())


def bandpass(n_taps: int, low_hz: float, high_hz: float, rate_hz: float, attenuation_db: float) -> ComplexTaps:
    """One-sided band-pass from ``low_hz`` to ``high_hz`` (its -6 dB points; either may be negative), unit gain within.

    The response is complex: it passes ``low_hz .. high_hz`` and stops the mirror image of that band.
    """
    half_hz, middle_hz = (high_hz - low_hz) / 2.0, (high_hz + low_hz) / 2.0
    t = np.arange(n_taps) - (n_taps - 1) / 2.0
    window = np.kaiser(n_taps, kaiser_beta(attenuation_db))
    taps = _sinc(n_taps, half_hz / rate_hz) * window
    # Unit gain at the band's middle, where the window method leaves the least ripple.
    return np.asarray(taps * np.exp(2j * np.pi * middle_hz / rate_hz * t) / taps.sum())


def mean_kernel(first_null_hz: float, rate_hz: float, sidelobe_db: float = 70.0) -> Floats:
    """Weights of a running mean that ignores everything from ``first_null_hz`` up, to the side-lobe level.

    A Dolph-Chebyshev window (C. L. Dolph, Proc. IRE 34 (1946) 335-348): the shortest weighting with such side lobes.
    Its sum is 1. ``first_null_hz`` is where the main lobe has fallen to the side-lobe level.
    """
    ratio = 10.0 ** (sidelobe_db / 20.0)
    order_cosh = np.arccosh(ratio)
    # The main lobe's edge lies where cos(pi f) = 1 / cosh(acosh(ratio) / M), M one less than the length.
    edge = np.pi * first_null_hz / rate_hz
    n_taps = int(np.ceil(order_cosh / np.arccosh(1.0 / np.cos(edge)))) + 1 | 1
    order = n_taps - 1
    x0 = np.cosh(order_cosh / order)
    x = x0 * np.cos(np.pi * np.arange(n_taps) / n_taps)
    inside = np.cos(order * np.arccos(np.clip(x, -1.0, 1.0)))
    outside = np.cosh(order * np.arccosh(np.maximum(np.abs(x), 1.0))) * np.where(x < 0, (-1.0) ** order, 1.0)
    spectrum = np.where(np.abs(x) <= 1.0, inside, outside)
    taps = np.real(np.fft.fft(spectrum))
    taps = np.concatenate([taps[n_taps // 2 + 1 :], taps[: n_taps // 2 + 1]])
    return np.asarray(taps / taps.sum())


def without_mean(taps: NDArray[np.complex128] | Floats, kernel: Floats) -> NDArray[np.complex128]:
    """The filter, followed by the subtraction of the running mean that ``kernel`` weighs: its gain at 0 Hz is nil."""
    delta = np.zeros(len(kernel))
    delta[len(kernel) // 2] = 1.0
    return np.asarray(np.convolve(taps, delta - kernel), dtype=np.complex128)


def centred(taps: NDArray[np.complex128] | Floats, n_taps: int) -> NDArray[np.complex128]:
    """The taps padded with zeros on both sides to the odd length ``n_taps``; raises ValueError where they don't fit."""
    spare = n_taps - len(taps)
    if spare < 0 or spare % 2:
        raise ValueError(f"n_taps={n_taps}: must be odd and at least {len(taps)}")
    return np.asarray(np.pad(taps, spare // 2), dtype=np.complex128)


def _sinc(n_taps: int, cutoff: float) -> Floats:
    t = np.arange(n_taps) - (n_taps - 1) / 2.0
    return np.asarray(2.0 * cutoff * np.sinc(2.0 * cutoff * t))
