"""Compatible quadrature stereo (47 CFR 73.128): left and right from the upright channel's envelope and phase.

The transmitter sends the envelope 1 + L + R at the phase atan((L - R) / (1 + L + R)). With I and Q the components of
what arrives upright, E its magnitude: L + R + 1 = E, and L - R = E Q / I. Both follow from the law by algebra.
"""

from __future__ import annotations

import numpy as np

from rxchain.kernels.fir import ComplexTaps
from rxchain.streams import ComplexBlock, FloatBlock

# The law reaches 1.25 rad at the most (47 CFR 73.128(c), from memory); beyond 1.4 rad the phase is noise or a fade.
_STEEPEST_TANGENT = np.float32(np.tan(1.4))


def sum_and_difference(upright: ComplexBlock) -> ComplexBlock:
    """Left plus right, with the carrier, as the real part and left minus right as the imaginary part; same shape."""
    envelope: FloatBlock = np.abs(upright)
    in_phase = upright.real
    tangent = upright.imag / np.where(np.abs(in_phase) < 1e-20, np.float32(1e-20), in_phase)
    np.clip(tangent, -_STEEPEST_TANGENT, _STEEPEST_TANGENT, out=tangent)
    return np.asarray(envelope + 1j * (envelope * tangent), dtype=np.complex64)


def left_and_right_taps(band: ComplexTaps) -> ComplexTaps:
    """Coherent-detector taps, (2, n_taps), that make left and right of :func:`sum_and_difference` and one band filter.

    L = (S + D) / 2 is the real part of (S + jD)(1 - j) / 2, and R = (S - D) / 2 that of (S + jD)(1 + j) / 2.
    """
    return np.stack([0.5 * (1 - 1j) * band, 0.5 * (1 + 1j) * band])
