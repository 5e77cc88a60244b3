"""The clock of the followers: hops of about 5.3 ms, gathered in quanta of four.

A block sum every 64 samples at 12 kHz is fast enough for any motion of a carrier worth following, and slow enough that
the work a hop costs does not count. Everything is decided once a hop or once a quantum and never once a call, so the
result cannot depend on how the stream was cut.
"""

from __future__ import annotations

HOP_S = 64 / 12_000.0
HOPS_A_QUANTUM = 4
LOOK_AHEAD_HOPS = 24  # 128 ms: beyond this nothing is gained but in deep fades
LIVE_LOOK_AHEAD_HOPS = 8  # with the quantum: 64 ms at 12 kHz
SPECTRUM_HOPS = 32  # length of a spectrum in which lines are searched
EVERY_HOPS = 16  # from one spectrum to the next
_HOP_MULTIPLE = 8  # keeps the lengths of the spectra to small prime factors


def hop_samples(rate_hz: float) -> int:
    """Samples a hop at a channel rate: a multiple of 8 close to 5.3 ms.

    >>> [hop_samples(rate_hz) for rate_hz in (8e3, 12e3, 12001.1321, 16e3, 24e3, 48e3)]
    [40, 64, 64, 88, 128, 256]
    """
    return max(1, round(rate_hz * HOP_S / _HOP_MULTIPLE)) * _HOP_MULTIPLE
