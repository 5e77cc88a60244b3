"""Taps for sidebands: both together, one alone, two independent ones, and two messages in quadrature."""

from __future__ import annotations

import numpy as np

from rxchain.emissions import Side
from rxchain.kernels.fir import ComplexTaps, bandpass, kaiser_taps, lowpass, mean_kernel, without_mean

STOP_DB, LIVE_STOP_DB = 70.0, 60.0
# What lies on a slope adds to the noise: 80 Hz on either side of a 2.4 kHz band cost 0.14 dB.
_WIDEST_TRANSITION_HZ = 80.0
_NARROWEST_TRANSITION_HZ = 50.0
# With short delay: half the filter's length and more, for 0.3 dB of noise in that band. A top slope may be wider still:
# the bands above are wide.
_LIVE_TRANSITION_HZ, _LIVE_TOP_HZ = 150.0, 600.0
_LIVE_MEAN_DB = 50.0
_MEAN_EDGE_HZ = 200.0  # message bands that start lower have their carrier taken out as a running mean


def transition_hz(low_hz: float, live: bool = False) -> float:
    """Width of a message filter's lower slope: it ends at the carrier at the latest."""
    widest_hz = _LIVE_TRANSITION_HZ if live else _WIDEST_TRANSITION_HZ
    return min(max(low_hz, _NARROWEST_TRANSITION_HZ), widest_hz)


def both_sidebands(
    low_hz: float, high_hz: float, rate_hz: float, steep: bool = False, live: bool = False
) -> ComplexTaps:
    """Band-pass for the real part: flat from ``low_hz`` to ``high_hz``, nothing at 0 Hz where the carrier is.

    A low edge under 200 Hz is made by subtracting a running mean: its gain falls gently from ``low_hz`` to exactly 0 at
    the carrier. ``steep`` makes the slope all the same, for emissions that send something else between the carrier and
    the message. ``live`` : shorter, with gentler slopes.
    """
    stop_db = LIVE_STOP_DB if live else STOP_DB
    if steep or low_hz >= _MEAN_EDGE_HZ:
        width_hz = transition_hz(low_hz, live)
        slope_hz = min(width_hz, rate_hz / 2.0 - high_hz)
        n_taps = kaiser_taps(width_hz / rate_hz, stop_db)
        one_sided = bandpass(n_taps, low_hz - width_hz / 2.0, high_hz + slope_hz / 2.0, rate_hz, stop_db)
        return np.asarray(2.0 * one_sided.real, dtype=np.complex128)
    slope_hz = min(_LIVE_TOP_HZ if live else _WIDEST_TRANSITION_HZ, rate_hz / 2.0 - high_hz)
    flat = lowpass(kaiser_taps(slope_hz / rate_hz, stop_db), high_hz + slope_hz / 2.0, rate_hz, stop_db)
    first_null_hz = max(low_hz, 20.0)
    mean = mean_kernel(first_null_hz, rate_hz, _LIVE_MEAN_DB) if live else mean_kernel(first_null_hz, rate_hz)
    return without_mean(flat, mean)


def one_sideband(side: Side, low_hz: float, high_hz: float, rate_hz: float, live: bool = False) -> ComplexTaps:
    """One-sided band-pass: the sideband's message is the real part of its output; the other side is 80 dB down.

    ``live`` : shorter, with gentler slopes, the other side 60 dB down.
    """
    stop_db = LIVE_STOP_DB if live else STOP_DB
    width_hz = transition_hz(low_hz, live)
    n_taps = kaiser_taps(width_hz / rate_hz, stop_db)
    upper = bandpass(n_taps, low_hz - width_hz / 2.0, high_hz + width_hz / 2.0, rate_hz, stop_db)
    return upper if side is Side.UPPER else np.conj(upper)


def quarter_turned(taps: ComplexTaps) -> ComplexTaps:
    """The same filter for the quadrature component: the real part of its output is the imaginary part's message."""
    return np.asarray(-1j * taps)
