"""Taps for vestigial emissions: the two copies of each low frequency weighted so that they add up true.

With h the transmitter's response about the carrier (1 on the whole side), the message's copy at +f arrives with h(f),
its mirror at -f with h(-f). Of all weightings that restore the message exactly, w = conj(h) / (|h(f)|^2 + |h(-f)|^2)
lets the least noise through (maximum-ratio combining of two copies in equal noise; D. G. Brennan, Proc. IRE 47 (1959)
1075-1102). Where both slopes are complementary, h(f) + h(-f) = 1, plain addition restores it too, with more noise.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TypeAlias

import numpy as np

from rxchain.emissions import Side
from rxchain.kernels.fir import ComplexTaps, kaiser_beta
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import Floats

_WINDOW_DB = 70.0
_CORNER_HZ = 300.0
_WEIGHT_S = 0.032  # 385 taps at 12 kHz: the weighting's corners are rounded off 60 dB down


def sent_slope(frequency_hz: Floats, vestige_hz: float) -> Floats:
    """The transmitter's straight slope: 0 at ``-vestige_hz`` from the carrier, half at it, 1 at ``+vestige_hz``."""
    return np.asarray(np.clip(0.5 + 0.5 * frequency_hz / vestige_hz, 0.0, 1.0))


def weight_for_response(frequency_hz: Floats, response_hz: Floats, response: Floats) -> Floats:
    """The weighting that restores the message and lets the least noise through, for a transmitter's measured response.

    response_hz, response : gain at ascending frequencies from the carrier, positive on the side sent whole. Beyond its
        ends the gain is that of the end.
    """
    gain = np.interp(frequency_hz, response_hz, response)
    power = gain**2 + np.interp(-frequency_hz, response_hz, response) ** 2
    return np.asarray(np.where(power > 1e-4, gain / np.maximum(power, 1e-4), 0.0))


def weight_for_sent(frequency_hz: Floats, vestige_hz: float) -> Floats:
    """The weighting for :func:`sent_slope`."""
    gain, mirrored = sent_slope(frequency_hz, vestige_hz), sent_slope(-frequency_hz, vestige_hz)
    return np.asarray(gain / (gain**2 + mirrored**2))


def weight_for_received(frequency_hz: Floats, vestige_hz: float) -> Floats:
    """The weighting for a vestige sent whole: half each within it, 1 beyond, nothing from the empty side.

    The step at the vestige's edge is spread over its last 300 Hz, or over half of a narrower one: both copies still add
    up to 1 there, at the price of a little noise, and the filter stays short.
    """
    corner_hz = min(_CORNER_HZ, vestige_hz / 2.0)
    beyond = np.clip((np.abs(frequency_hz) - (vestige_hz - corner_hz)) / corner_hz, 0.0, 1.0)
    return np.asarray(0.5 + 0.5 * np.sign(frequency_hz) * beyond)


Weight: TypeAlias = Callable[[Floats], Floats]


def vestigial(side: Side, weight: Weight, band: ComplexTaps, rate_hz: float) -> ComplexTaps:
    """Taps that restore the message of a vestigial emission.

    weight : the weighting at frequencies from the carrier, positive on the side sent whole.
    band : the message's band filter, real.
    """
    n_taps = round(_WEIGHT_S * rate_hz) | 1
    length = next_smooth(8 * n_taps, multiple_of=2)
    wanted = weight(np.asarray(np.fft.fftfreq(length, 1.0 / rate_hz), dtype=np.float64))
    taps = np.fft.fftshift(np.fft.ifft(wanted))[length // 2 - n_taps // 2 : length // 2 + n_taps // 2 + 1]
    taps = np.convolve(taps * np.kaiser(n_taps, kaiser_beta(_WINDOW_DB)), band)
    return np.asarray(taps if side is Side.UPPER else np.conj(taps), dtype=np.complex128)
