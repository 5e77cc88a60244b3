"""Turn hops of samples by a phase that runs straight from each hop's edge to the next."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import ComplexBlock, Floats


def _unit(cycles: Floats) -> NDArray[np.complex64]:
    """Unit phasors of phases in cycles, reduced to one turn in float64: then float32 trigonometry is exact enough."""
    angle_rad = (2.0 * np.pi * (cycles - np.rint(cycles))).astype(np.float32)
    phasor = np.empty(angle_rad.shape, np.complex64)
    np.cos(angle_rad, out=phasor.real)
    np.sin(angle_rad, out=phasor.imag)
    return phasor


def derotate(samples: ComplexBlock, edges_cycles: Floats) -> ComplexBlock:
    """Samples less the phase given at the edges of the hops.

    samples : complex64, (channels, hops * hop_samples), hop_samples a multiple of 8.
    edges_cycles : float64, (channels, hops + 1).
    The result has the samples' shape and magnitudes. A hop's rotation is the outer product of a coarse and a fine
    part, so 64 samples take 20 sines and cosines instead of 64.
    """
    n_channels, hops = edges_cycles.shape[0], edges_cycles.shape[1] - 1
    hop = samples.shape[1] // hops
    fine_samples = 16 if hop % 16 == 0 else 8
    step_cycles = np.diff(edges_cycles, axis=1)[:, :, None] / -hop
    start_cycles = -edges_cycles[:, :-1, None]
    coarse = _unit(start_cycles + step_cycles * (np.arange(0, hop, fine_samples) + 0.5))
    fine = _unit(step_cycles * np.arange(fine_samples))
    turn = coarse[:, :, :, None] * fine[:, :, None, :]
    shape = (n_channels, hops, hop // fine_samples, fine_samples)
    turn *= samples.reshape(shape)
    return turn.reshape(n_channels, hops * hop)
