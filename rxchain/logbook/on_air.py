"""When an emission came on and went off, to the millisecond, from the power of its own narrow I/Q.

The squelch tells to some tens of milliseconds; the edge itself is where the power crosses the geometric mean of the noise
before it and the signal after it.
"""

from __future__ import annotations

import numpy as np

from rxchain.streams import ComplexBlock, Floats

_BLOCK_S = 0.001
_SMOOTHED = 3  # blocks
_SEARCH_S = 0.45
_LEVEL_S = 0.6
_LEAST_RATIO = 4.0  # of signal to noise: under it the squelch's time stands


def on_air(iq: ComplexBlock, rate_hz: float, begin_s: float, end_s: float) -> tuple[float, float]:
    """Beginning and end, seconds from the first sample of ``iq``, (n,), near those that the squelch told."""
    block = max(1, round(_BLOCK_S * rate_hz))
    n = len(iq) // block
    if n < 10:
        return begin_s, end_s
    power = np.square(np.abs(iq[: n * block])).reshape(n, block).mean(axis=1, dtype=np.float64)
    power = np.convolve(power, np.ones(_SMOOTHED) / _SMOOTHED, "same")
    block_s = block / rate_hz
    begin = _crossing(power, block_s, begin_s)
    end = _crossing(power[::-1], block_s, n * block_s - end_s)
    return begin_s if begin is None else begin, end_s if end is None else n * block_s - end


def _crossing(power: Floats, block_s: float, about_s: float) -> float | None:
    """Where the power first rises, going forward, near ``about_s``; None where there is no edge to be seen."""
    first, last = (round(max(0.0, about_s + by) / block_s) for by in (-_SEARCH_S, _SEARCH_S))
    before = power[max(0, first - round(0.1 / block_s)) : first + round(0.05 / block_s)]
    after = power[first : last + round(_LEVEL_S / block_s)]
    if len(before) < 20 or len(after) < 20:
        return None
    noise, signal = float(np.median(before)), float(np.quantile(after, 0.8))
    if signal < _LEAST_RATIO * noise:
        return None
    above = np.flatnonzero(power[first:last] > np.sqrt(noise * signal))
    return None if not len(above) else (first + int(above[0]) + 0.5 * _SMOOTHED - 0.5) * block_s
