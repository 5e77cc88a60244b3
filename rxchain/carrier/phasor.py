"""Unit phasors of phases counted in turns."""

from __future__ import annotations

import numpy as np

from rxchain.streams import ComplexBlock, Floats


def unit_phasor(cycles: Floats) -> ComplexBlock:
    """``exp(2j pi cycles)``, complex64, of any phases.

    The phase is reduced to one turn in float64; after that float32 trigonometry is exact to 1e-7.

    >>> bool(np.allclose(unit_phasor(np.array([0.0, 1e9 + 0.25])), [1, 1j], atol=1e-6))
    True
    """
    angle_rad = (2.0 * np.pi * (cycles - np.rint(cycles))).astype(np.float32)
    phasor = np.empty(angle_rad.shape, np.complex64)
    np.cos(angle_rad, out=phasor.real)
    np.sin(angle_rad, out=phasor.imag)
    return phasor
