"""Rates and block sizes that fit together: one forward transform, from which channels of several rates can be cut.

With ``N`` the forward length, ``V`` the overlap and ``fs`` the capture's rate, a channel of rate ``fs * m / N`` takes
``m`` bins; its overlap ``V * m / N`` must be a whole, even number of samples so that its filter's delay is whole too.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction

from rxchain.errors import SettingError
from rxchain.kernels.fir import kaiser_transition
from rxchain.kernels.smooth_numbers import is_smooth

BASE_RATE_HZ = 12_000.0
LOWEST_CAPTURE_RATE_HZ, HIGHEST_CAPTURE_RATE_HZ = 8_000.0, 3.2e6
STOP_DB = 86.0  # design figure; at least 80 dB is promised, the rest is for rounding and the bins left out
_HOP, _OVERLAP = 64, 64  # wanted, in samples of the base rate: 5.3 ms each
_MOST_OVERLAP = 120


@dataclass(frozen=True, slots=True)
class BankPlan:
    """How a capture is cut into channels; a channel's width is the number of bins its inverse transform takes.

    capture_rate_hz : rate of the wideband stream.
    length, overlap : forward transform and its overlap, in samples of the capture; each hop is their difference.
    base_bins : bins of the narrowest channels.
    """

    capture_rate_hz: float
    length: int
    overlap: int
    base_bins: int

    @property
    def hop(self) -> int:
        """New samples of the capture at each hop."""
        return self.length - self.overlap

    @property
    def widths(self) -> list[int]:
        """Numbers of bins that can be had, narrowest first: doublings of the base, then the whole capture."""
        widths = [self.base_bins]
        while widths[-1] * 2 <= self.length:
            widths.append(widths[-1] * 2)
        if widths[-1] < self.length and self.overlap % 2 == 0:
            widths.append(self.length)
        return widths

    def rate_hz(self, bins: int) -> float:
        """Sample rate of channels so many bins wide."""
        return self.capture_rate_hz * bins / self.length

    def overlap_of(self, bins: int) -> int:
        """Outputs of such a channel that are discarded at each hop; the filter's delay is half of it."""
        return self.overlap * bins // self.length

    def usable_hz(self, bins: int) -> float:
        """Half of the band within which such a channel is flat and free of aliases."""
        rate_hz = self.rate_hz(bins)
        if bins == self.length:
            return 0.5 * rate_hz  # nothing is decimated: the capture's own edges are the limit
        return rate_hz * (0.5 - kaiser_transition(self.overlap_of(bins) + 1, STOP_DB))

    def narrowest(self, half_width_hz: float) -> int | None:
        """The least number of bins whose channels hold that much on either side of their middle; None if none does."""
        return next((bins for bins in self.widths if self.usable_hz(bins) >= half_width_hz), None)


def plan_bank(capture_rate_hz: float) -> BankPlan:
    """The plan for a capture's rate: 12 kHz channels where a small whole-number ratio allows, else the nearest above.

    Raises :class:`SettingError` outside 8 kS/s to 3.2 MS/s.

    >>> plan = plan_bank(2.4e6)
    >>> plan.length, plan.hop, plan.rate_hz(128), plan.rate_hz(256)
    (25600, 12800, 12000.0, 24000.0)
    >>> round(plan_bank(12001.1321).rate_hz(128), 4)
    12001.1321
    """
    if not LOWEST_CAPTURE_RATE_HZ <= capture_rate_hz <= HIGHEST_CAPTURE_RATE_HZ:
        raise SettingError("rate", f"{capture_rate_hz:g}Hz", "must lie between 8 kS/s and 3.2 MS/s")
    if float(capture_rate_hz).is_integer() and capture_rate_hz >= BASE_RATE_HZ:
        plan = _plan_ratio(capture_rate_hz, Fraction(int(capture_rate_hz), int(BASE_RATE_HZ)))
        if plan is not None:
            return plan
    decimation = max(1, math.floor(capture_rate_hz / BASE_RATE_HZ))
    while not is_smooth(decimation):
        decimation -= 1
    plan = _plan_ratio(capture_rate_hz, Fraction(decimation))
    if plan is None:  # cannot happen: a whole, smooth ratio takes any even overlap
        raise SettingError("rate", f"{capture_rate_hz:g}Hz", "no block size fits this rate")
    return plan


def _plan_ratio(capture_rate_hz: float, ratio: Fraction) -> BankPlan | None:
    """The cheapest plan for this ratio of capture rate to base rate, None where no reasonable one exists."""
    step = ratio.denominator
    best: tuple[float, BankPlan] | None = None
    for overlap in range(step, _MOST_OVERLAP + 1, step):
        if overlap % 2 or overlap < _OVERLAP:
            continue
        for hop in range(step, 2 * _HOP + 1, step):
            length = (hop + overlap) * ratio
            if hop < _HOP // 2 or not is_smooth(length.numerator):
                continue
            # Work per sample, and a hop near the wanted one so that the delay stays where it was designed to be.
            cost = (hop + overlap) / hop + abs(math.log(hop / _HOP)) + 0.5 * abs(overlap / _OVERLAP - 1.0)
            plan = BankPlan(capture_rate_hz, int(length), int(overlap * ratio), hop + overlap)
            if best is None or cost < best[0]:
                best = (cost, plan)
    return None if best is None else best[1]
