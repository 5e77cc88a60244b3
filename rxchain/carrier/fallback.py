"""Two followers on the same channels: the first where it has found something, else the second."""

from __future__ import annotations

from dataclasses import fields

import numpy as np

from rxchain.carrier.follower import CarrierFollower
from rxchain.carrier.joining import beginning, join
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.streams import Bools, ComplexBlock


class FallbackFollower:
    """Follows what ``first`` follows; a channel in which that finds nothing is turned by what ``second`` follows.

    Quadrature emissions are the case for it: a pilot where one is sent, else the line of the fourth power. Both run all
    the time, so that a pilot that appears late is taken up. Where the second has been taken it stays through its own
    pauses: going back to nothing would turn the messages over.
    """

    def __init__(self, first: CarrierFollower, second: CarrierFollower) -> None:
        self._followers = first, second
        self.hop_samples = first.hop_samples
        self.delay_samples = max(first.delay_samples, second.delay_samples)
        self._waiting: list[list[Turned]] = [[], []]
        self._second_taken: Bools | None = None
        self._now_second: Bools | None = None

    @property
    def uses_second(self) -> Bools | None:
        """Channels, (channels,), that are turned by what the second follows; None before anything was found."""
        return self._now_second

    def reset(self) -> None:
        """As new, with the same settings."""
        for follower in self._followers:
            follower.reset()
        self._waiting, self._second_taken, self._now_second = [[], []], None, None

    def process(self, iq: ComplexBlock) -> Turned:
        """Whole hops as far as both followers reach."""
        return self._chosen([follower.process(iq) for follower in self._followers])

    def flush(self) -> Turned:
        """The rest; the last hop may be short."""
        turned = self._chosen([follower.flush() for follower in self._followers])
        self._waiting = [[], []]
        return turned

    def _chosen(self, new: list[Turned]) -> Turned:
        hop = self.hop_samples
        both = [join([*waiting, piece], len(piece.iq), hop) for waiting, piece in zip(self._waiting, new, strict=True)]
        samples = min(turned.iq.shape[1] for turned in both)
        self._waiting = [[_after(turned, samples)] for turned in both]
        first, second = (beginning(turned, samples) for turned in both)
        found = second.track.lock != Lock.NONE
        if self._second_taken is not None and found.shape[1]:
            found[:, 0] |= self._second_taken
        taken = np.logical_or.accumulate(found, axis=1)
        if taken.shape[1]:
            self._second_taken = taken[:, -1]
        use_second = (first.track.lock == Lock.NONE) & taken
        if use_second.shape[1]:
            self._now_second = use_second[:, -1]
        readings = {
            field.name: np.where(use_second, getattr(second.track, field.name), getattr(first.track, field.name))
            for field in fields(Track)
        }
        by_sample = np.repeat(use_second, hop, axis=1)[:, :samples]
        return Turned(np.where(by_sample, second.iq, first.iq), Track(**readings), hop)


def _after(turned: Turned, samples: int) -> Turned:
    """What follows the first samples, whole hops of them."""
    hops = -(-samples // turned.hop_samples)
    track = Track(**{field.name: getattr(turned.track, field.name)[:, hops:] for field in fields(Track)})
    return Turned(turned.iq[:, samples:], track, turned.hop_samples)
