"""Claim a lock only where it is real, and let go in time.

The statistic is the power of the smoothed line over the noise of the same smoothing, averaged over ten hops. A line is
taken up on suspicion, shown once the statistic has confirmed it, held on its frequency while it is in the noise, and
dropped when it does not come back.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.track import Lock
from rxchain.streams import Bools, Floats

_ON = 10.0 ** (11.0 / 10.0)
_OFF = 10.0 ** (7.0 / 10.0)
_CEILING = 10.0 ** (24.0 / 10.0)  # else a strong carrier's loss would take long to be seen
_RECENT_ALLOWANCE = 2.5  # of what the longest window gathers more; a carrier just gone stays in that for a second
_MEMORY_HOPS = 10.0
_READY_HOPS = 12.0  # after the look-ahead: the statistic has forgotten how it began
_COAST_S = 3.0


class LockWatch:
    """Which channels follow a line, since when, and how sure that is."""

    def __init__(self, n_channels: int, lag: int, hops: int, hop_s: float, confirm_s: float) -> None:
        self._quantum_s = hops * hop_s
        self._gain = 1.0 - (1.0 - 1.0 / _MEMORY_HOPS) ** hops
        self._ready_s = (lag + _READY_HOPS) * hop_s
        self._confirm_s = max(confirm_s, self._ready_s + 0.3)
        self.active: Bools = np.zeros(n_channels, np.bool_)
        self.confirmed: Bools = np.zeros(n_channels, np.bool_)
        self.locked: Bools = np.zeros(n_channels, np.bool_)
        self.followed_s: Floats = np.zeros(n_channels)
        self._statistic: Floats = np.zeros(n_channels)
        self._weak_s: Floats = np.zeros(n_channels)

    def start(self, channel: int) -> None:
        """Take up a line on suspicion."""
        self.active[channel] = True
        self.confirmed[channel] = self.locked[channel] = False
        self.followed_s[channel] = self._statistic[channel] = self._weak_s[channel] = 0.0

    def judge(self, ratio: Floats, recent_ratio: Floats) -> Bools:
        """Take in a quantum; the channels that are given up.

        ratio : power of the smoothed line over the noise in it.
        recent_ratio : the same by the last 128 ms or less.
        """
        ratio = np.minimum(np.minimum(ratio, _RECENT_ALLOWANCE * recent_ratio), _CEILING)
        self._statistic += self._gain * (ratio - self._statistic)
        self.followed_s += self._quantum_s
        alive = self._statistic > _OFF
        on = self.active & (self.followed_s > self._ready_s) & (self._statistic > _ON)
        self.locked = on | (alive & self.locked)
        self.confirmed |= self.locked
        self._weak_s = np.where(self.locked, 0.0, self._weak_s + self._quantum_s)
        lost = self.confirmed & (self._weak_s > _COAST_S)
        mistaken = ~self.confirmed & (self.followed_s > self._confirm_s)
        given_up = self.active & (lost | mistaken)
        self.active &= ~given_up
        self.confirmed &= ~given_up
        self.locked &= ~given_up
        return given_up

    @property
    def lock(self) -> NDArray[np.int8]:
        """Values of :class:`Lock`, (channels,)."""
        shown = self.active & self.confirmed
        return np.where(shown, np.where(self.locked, Lock.LOCKED, Lock.HELD), Lock.NONE).astype(np.int8)
