"""Taps for sidebands: both together, one alone, two independent ones, and two messages in quadrature."""

from __future__ import annotations

import numpy as np

from rxchain.emissions import Side
from rxchain.kernels.fir import ComplexTaps, bandpass, kaiser_taps, lowpass, mean_kernel, without_mean

STOP_DB = 70.0
# What lies on a slope adds to the noise: 80 Hz on either side of a 2.4 kHz band cost 0.14 dB.
_WIDEST_TRANSITION_HZ = 80.0
_NARROWEST_TRANSITION_HZ = 50.0
_MEAN_EDGE_HZ = 200.0  # message bands that start lower have their carrier taken out as a running mean


def transition_hz(low_hz: float) -> float:
    """Width of a message filter's lower slope: it ends at the carrier at the latest."""
    return min(max(low_hz, _NARROWEST_TRANSITION_HZ), _WIDEST_TRANSITION_HZ)


def both_sidebands(low_hz: float, high_hz: float, rate_hz: float, steep: bool = False) -> ComplexTaps:
    """Band-pass for the real part: flat from ``low_hz`` to ``high_hz``, nothing at 0 Hz where the carrier is.

    A low edge under 200 Hz is made by subtracting a running mean: its gain falls gently from ``low_hz`` to exactly 0 at
    the carrier. ``steep`` makes the slope all the same, for emissions that send something else between the carrier and
    the message.
    """
    slope_hz = min(_WIDEST_TRANSITION_HZ, rate_hz / 2.0 - high_hz)
    if steep or low_hz >= _MEAN_EDGE_HZ:
        width_hz = transition_hz(low_hz)
        n_taps = kaiser_taps(width_hz / rate_hz, STOP_DB)
        one_sided = bandpass(n_taps, low_hz - width_hz / 2.0, high_hz + slope_hz / 2.0, rate_hz, STOP_DB)
        return np.asarray(2.0 * one_sided.real, dtype=np.complex128)
    n_taps = kaiser_taps(slope_hz / rate_hz, STOP_DB)
    return without_mean(
        lowpass(n_taps, high_hz + slope_hz / 2.0, rate_hz, STOP_DB), mean_kernel(max(low_hz, 20.0), rate_hz)
    )


def one_sideband(side: Side, low_hz: float, high_hz: float, rate_hz: float) -> ComplexTaps:
    """One-sided band-pass: the sideband's message is the real part of its output; the other side is 80 dB down."""
    width_hz = transition_hz(low_hz)
    slope_hz = min(width_hz, _WIDEST_TRANSITION_HZ)
    n_taps = kaiser_taps(width_hz / rate_hz, STOP_DB)
    upper = bandpass(n_taps, low_hz - width_hz / 2.0, high_hz + slope_hz / 2.0, rate_hz, STOP_DB)
    return upper if side is Side.UPPER else np.conj(upper)


def quarter_turned(taps: ComplexTaps) -> ComplexTaps:
    """The same filter for the quadrature component: the real part of its output is the imaginary part's message."""
    return np.asarray(-1j * taps)
