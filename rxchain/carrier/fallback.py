"""Two followers on the same channels: the first where it has found something, else the second."""

from __future__ import annotations

import numpy as np

from rxchain.carrier.follower import CarrierFollower
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.streams import ComplexBlock


class FallbackFollower:
    """Follows what ``first`` follows; a channel in which that finds nothing is turned by what ``second`` follows.

    Quadrature emissions are the case for it: a pilot where one is sent, else the line of the fourth power. The choice
    is made anew at each hop, and both run all the time, so that a pilot that appears late is taken up.
    """

    def __init__(self, first: CarrierFollower, second: CarrierFollower) -> None:
        self._followers = first, second
        self.hop_samples = first.hop_samples
        self.delay_samples = max(first.delay_samples, second.delay_samples)
        self._waiting: list[list[Turned]] = [[], []]

    def reset(self) -> None:
        """As new, with the same settings."""
        for follower in self._followers:
            follower.reset()
        self._waiting = [[], []]

    def process(self, iq: ComplexBlock) -> Turned:
        """Whole hops as far as both followers reach."""
        return self._chosen([follower.process(iq) for follower in self._followers])

    def flush(self) -> Turned:
        """The rest; the last hop may be short."""
        turned = self._chosen([follower.flush() for follower in self._followers])
        self._waiting = [[], []]
        return turned

    def _chosen(self, new: list[Turned]) -> Turned:
        both = [_joined([*waiting, piece]) for waiting, piece in zip(self._waiting, new, strict=True)]
        hops = min(turned.track.lock.shape[1] for turned in both)
        samples = min(min(turned.iq.shape[1] for turned in both), hops * self.hop_samples)
        self._waiting = [[_cut(turned, hops, samples, rest=True)] for turned in both]
        first, second = (_cut(turned, hops, samples, rest=False) for turned in both)
        use_second = (first.track.lock == Lock.NONE) & (second.track.lock != Lock.NONE)
        track = Track(
            *(
                np.where(use_second, getattr(second.track, name), getattr(first.track, name))
                for name in ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")
            )
        )
        by_sample = np.repeat(use_second, self.hop_samples, axis=1)[:, :samples]
        return Turned(np.where(by_sample, second.iq, first.iq), track, self.hop_samples)


def _joined(pieces: list[Turned]) -> Turned:
    tracks = [piece.track for piece in pieces]
    joined = Track(
        *(
            np.concatenate([getattr(track, name) for track in tracks], axis=1)
            for name in ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")
        )
    )
    return Turned(np.concatenate([piece.iq for piece in pieces], axis=1), joined, pieces[0].hop_samples)


def _cut(turned: Turned, hops: int, samples: int, *, rest: bool) -> Turned:
    h, s = (slice(hops, None), slice(samples, None)) if rest else (slice(hops), slice(samples))
    t = turned.track
    track = Track(t.offset_hz[:, h], t.phase_cycles[:, h], t.amplitude[:, h], t.noise_density[:, h], t.lock[:, h])
    return Turned(turned.iq[:, s], track, turned.hop_samples)
