"""Turn hops of samples by a phase that runs straight from each hop's edge to the next."""

from __future__ import annotations

import numpy as np

from rxchain.carrier.phasor import unit_phasor
from rxchain.streams import ComplexBlock, Floats


def derotate(samples: ComplexBlock, edges_cycles: Floats) -> ComplexBlock:
    """Samples less the phase given at the edges of the hops.

    samples : complex64, (channels, hops * hop_samples). edges_cycles : float64, (channels, hops + 1).
    The result has the samples' shape and magnitudes.

    A hop's rotation is built by doubling: the first half times a power of the step is the second half. So a hop of any
    length takes two sines and cosines. The powers are kept in float64, as their errors would double with them.
    """
    n_channels, hops = edges_cycles.shape[0], edges_cycles.shape[1] - 1
    hop = samples.shape[1] // hops
    step_cycles = np.diff(edges_cycles, axis=1) / -hop
    power = np.exp(2j * np.pi * step_cycles)[:, :, None]
    turn = np.empty((n_channels, hops, hop), np.complex64)
    turn[:, :, 0] = unit_phasor(0.5 * step_cycles - edges_cycles[:, :-1])
    done = 1
    while done < hop:
        more = min(done, hop - done)
        np.multiply(turn[:, :, :more], power.astype(np.complex64), out=turn[:, :, done : done + more])
        power = power * power
        done += more
    turned = turn.reshape(n_channels, hops * hop)
    turned *= samples
    return turned
