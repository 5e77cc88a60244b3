"""Powers of a signal whose messages leave no carrier: they have a line at a multiple of the carrier's frequency.

A double-sideband message without a carrier is a real factor times the carrier's phasor: its square has a line at twice
the carrier. Two messages in quadrature have a line in the fourth power, at four times the carrier (J. G. Proakis,
"Digital Communications", on power-law carrier recovery); dividing by the squared magnitude keeps loud moments from
outweighing all others.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import ComplexBlock, Floats

_FLOOR = np.float32(1e-30)


def line_signal(iq: ComplexBlock, power: int) -> ComplexBlock:
    """The signal whose line is followed: itself, its square, or its fourth power over its squared magnitude."""
    if power == 1:
        return iq
    square = iq * iq
    if power == 2:
        return square
    size = iq.real**2 + iq.imag**2
    fourth: ComplexBlock = square * (square / np.maximum(size, _FLOOR))
    return fourth


def line_amplitude(amplitude: NDArray[np.float64], power: int) -> Floats:
    """Amplitude in the signal's own units of a line in :func:`line_signal`."""
    return amplitude if power == 1 else np.sqrt(amplitude)


def signal_noise_density(line_density: Floats, line_level: Floats, power: int, bandwidth_hz: float) -> Floats:
    """Noise per hertz in the signal, from the noise per hertz across the line of its power.

    For the square: signal times noise gives ``4 S N0``, noise times noise ``2 B N0^2`` (S. O. Rice, "Mathematical
    analysis of random noise", Bell Syst. Tech. J. 24, 1945: square-law device). For the fourth power likewise with 16
    and 4, an upper bound: the messages themselves are noise to its line.
    """
    if power == 1:
        return line_density
    linear, square = power**2 * line_level, power * bandwidth_hz
    density: Floats = (np.sqrt(linear**2 + 4.0 * square * line_density) - linear) / (2.0 * square)
    return density
