"""Exact complex envelopes of every emission, in float64: the reference against which the receiver is measured.

The envelope is relative to the carrier's frequency, sent or suppressed. Its scale: the unmodulated carrier is 1 where a
full one is sent (A3E, C3E, AM-STEREO, A1A), else the peak envelope is 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.emissions import Emission, Side
from rxchain.streams import Floats

Envelope = NDArray[np.complex128]

# 47 CFR 73.128(c)(7), from memory: a 25 Hz pilot of 0.05 rad peak in the difference channel.
STEREO_PILOT_HZ, STEREO_PILOT_RAD = 25.0, 0.05
_SUPPRESSED_DB = float("inf")


@dataclass(frozen=True, slots=True)
class Modulation:
    """How an emission carries its messages.

    depth : of A3E, C3E and AM-STEREO, 1 for 100 %. carrier_db : carrier of R3E, H3E, J3E and B8E below peak envelope
    power. pilot_db : pilot of QAM below the messages' mean power. vestige_hz, vestige_is_flat : half-width of the slope
    about the carrier, or of a vestige sent whole. stereo_pilot : whether the 25 Hz pilot is sent.
    """

    depth: float = 0.8
    carrier_db: float = _SUPPRESSED_DB
    pilot_db: float = _SUPPRESSED_DB
    vestige_hz: float = 1125.0
    vestige_is_flat: bool = False
    stereo_pilot: bool = True


@dataclass(frozen=True, slots=True)
class Modulated:
    """The envelope, (n,), and the messages as a linear receiver delivers them, (messages, n), in the same units."""

    envelope: Envelope
    messages: Floats


def modulate(emission: Emission, messages: Floats, rate_hz: float, how: Modulation) -> Modulated:
    """The emission of the messages, float64, (messages, n), peak 1 each.

    Single sideband is m·cos - m^·sin for the upper sideband (m^ the Hilbert transform), plus for the lower: the envelope
    m + j m^ or its conjugate.
    """
    first = messages[0]
    match emission.family:
        case "A3E":
            return Modulated(1.0 + how.depth * first.astype(complex), how.depth * messages)
        case "DSB-SC" | "A1A":
            return Modulated(first.astype(complex), messages)
        case "J3E" | "R3E" | "H3E":
            return _single_sideband(first, emission.side or Side.UPPER, how.carrier_db)
        case "B8E":
            return _independent_sidebands(messages, how.carrier_db)
        case "C3E" | "VSB-SC":
            vestigial = vestigial_envelope(first, emission.side or Side.UPPER, rate_hz, how)
            if emission.family == "C3E":
                return Modulated(1.0 + how.depth * vestigial, how.depth * messages)
            scale = 1.0 / _peak(vestigial)
            return Modulated(scale * vestigial, scale * messages)
        case "QAM":
            return _quadrature(messages, how.pilot_db)
        case _:
            return _stereo(messages, rate_hz, how)


def analytic(message: Floats) -> Envelope:
    """The message plus j times its Hilbert transform: nothing below 0 Hz."""
    spectrum = np.fft.fft(message)
    n = len(message)
    gain = np.zeros(n)
    gain[1 : (n + 1) // 2] = 2.0
    gain[0] = 1.0
    if n % 2 == 0:
        gain[n // 2] = 1.0
    return np.asarray(np.fft.ifft(spectrum * gain))


def vestigial_envelope(message: Floats, side: Side, rate_hz: float, how: Modulation) -> Envelope:
    """Twice the message through the transmitter's response: its whole side is that of a single sideband."""
    frequency_hz = np.fft.fftfreq(len(message), 1.0 / rate_hz) * int(side)
    if how.vestige_is_flat:
        response = np.where(frequency_hz >= -how.vestige_hz, 1.0, 0.0)
    else:
        response = np.clip(0.5 + 0.5 * frequency_hz / how.vestige_hz, 0.0, 1.0)
    return np.asarray(np.fft.ifft(2.0 * np.fft.fft(message) * response))


def _carrier(below_peak_db: float) -> float:
    return 0.0 if np.isinf(below_peak_db) else float(10.0 ** (-below_peak_db / 20.0))


def _single_sideband(message: Floats, side: Side, carrier_db: float) -> Modulated:
    sideband = analytic(message)
    carrier = _carrier(carrier_db)
    scale = (1.0 - carrier) / _peak(sideband)
    sideband = sideband if side is Side.UPPER else np.conj(sideband)
    return Modulated(carrier + scale * sideband, scale * message[None])


def _independent_sidebands(messages: Floats, carrier_db: float) -> Modulated:
    sidebands = analytic(messages[0]) + np.conj(analytic(messages[1]))
    carrier = _carrier(carrier_db)
    scale = (1.0 - carrier) / _peak(sidebands)
    return Modulated(carrier + scale * sidebands, scale * messages)


def _quadrature(messages: Floats, pilot_db: float) -> Modulated:
    both = messages[0] + 1j * messages[1]
    pilot = _carrier(pilot_db) * float(np.sqrt(np.mean(np.abs(both) ** 2)))
    scale = 1.0 / _peak(both + pilot)
    return Modulated(scale * (both + pilot), scale * messages)


def _stereo(messages: Floats, rate_hz: float, how: Modulation) -> Modulated:
    """47 CFR 73.128: the envelope 1 + L + R at the phase atan((L - R) / (1 + L + R)); left and right share the depth."""
    left, right = how.depth / 2.0 * messages
    difference = left - right
    if how.stereo_pilot:
        t = np.arange(messages.shape[1]) / rate_hz
        difference = difference + STEREO_PILOT_RAD * np.sin(2 * np.pi * STEREO_PILOT_HZ * t)
    total = 1.0 + left + right
    return Modulated(total * np.exp(1j * np.arctan2(difference, total)), np.stack([left, right]))


def _peak(envelope: Envelope) -> float:
    peak = float(np.max(np.abs(envelope), initial=0.0))
    return peak if peak > 0 else 1.0
