"""Which detector each channel is heard through: predict, compare, change slowly.

Predicted powers are smoothed over two seconds or so; another detector takes over when it leads by half a decibel for a
second, or at once when it leads by three both smoothed and now. One sideband alone has half the signal of both, and in a
selective fade its lead is soon another's: it must lead by two and a half for two seconds, and never takes over at once.
Without a carrier to follow there is nothing to choose: the envelope needs none. In a fade that is flown through, things
stay.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.hops import hop_samples
from rxchain.carrier.track import Lock, Turned
from rxchain.detectors.picker_words import Standing, in_words
from rxchain.detectors.prediction import DETECTORS, ENVELOPE, PickedChannel, Prediction, Predictor, Rows
from rxchain.kernels.overlap_save import Windows
from rxchain.streams import Bools, Floats

__all__ = ["Choices", "DetectorPicker", "PickedChannel"]

_STEP_HOPS = 48  # 0.26 s
_TURNS = 4  # a channel is looked at every fourth step: once a second
# Weight of the latest look: two seconds' memory; where sidebands vie, of which one fades or is talked over now and then, five.
_LATEST, _LATEST_OF_SIDES = 0.4, 0.2
_LEAD_DB, _ONE_SIDE_LEAD_DB, _AT_ONCE_DB = 0.5, 2.5, 3.0
_PATIENCE, _ONE_SIDE_PATIENCE = 2, 3  # looks
_LOOKS_HELD = 10  # envelope distortion comes in bursts: the largest of the last 10 s counts
_NOTHING_TO_HEAR_DB = 0.0
_UNKNOWN_DB = -200.0
_TINY = 1e-30


@dataclass(frozen=True, slots=True)
class Choices:
    """candidate : int8, (channels, steps), indices into each channel's candidates; step ``s`` covers samples
    ``[s * step_samples, (s + 1) * step_samples)`` of the upright stream.
    """

    candidate: NDArray[np.int8]


class DetectorPicker:
    """Chooses for a group of channels; the choice for a step rests on the samples before it.

    process(turned) : upright samples and the follower's readings, any split. Returns the choices that have become known;
        those for the first step at once, each further one when the step before it is complete.
    """

    def __init__(self, channels: Sequence[PickedChannel], rate_hz: float, usable_hz: float) -> None:
        self._channels = tuple(channels)
        hop = hop_samples(rate_hz)
        self.step_samples = _STEP_HOPS * hop
        self._predictor = Predictor(channels, rate_hz, usable_hz, frame=6 * hop)
        n = len(channels)
        self._windows: Windows[np.complex64] = Windows((n,), self._predictor.overlap, self.step_samples, np.complex64)
        names = [channel.candidates for channel in channels]
        # Place of each candidate among the predictor's detectors; those that a channel has not are never the best.
        most = max(len(one) for one in names)
        self._place = np.array([[DETECTORS.index(name) for name in one] + [0] * (most - len(one)) for one in names])
        self._offered: Bools = np.array([[k < len(one) for k in range(most)] for one in names])
        self._is_one_side: Bools = self._place > ENVELOPE
        self._latest: Floats = np.where(self._is_one_side.any(axis=1), _LATEST_OF_SIDES, _LATEST)
        self._envelope = np.array([one.index("envelope") if "envelope" in one else -1 for one in names])
        self._coherent = np.array([one.index("coherent") if "coherent" in one else 0 for one in names])
        self.reset()

    def reset(self) -> None:
        """As new, with the same channels."""
        n, shape = len(self._channels), (len(self._channels), len(DETECTORS))
        self._windows.reset()
        self._locks: list[NDArray[np.int8]] = []
        self._message, self._noise, self._distortion = np.zeros(shape), np.zeros(shape), np.zeros(shape)
        self._bursts = np.zeros((n, _LOOKS_HELD))
        self._deepest, self._sideways = np.ones((n, _LOOKS_HELD)), np.zeros((n, _LOOKS_HELD))
        self._carrier_to_noise_density = np.zeros(n)
        self._looks = np.zeros(n, np.int64)
        self._leading = np.zeros(n, np.int64)
        self._leader = np.zeros(n, np.int8)
        self._steps = 0
        self._now = np.where(self._envelope >= 0, self._envelope, self._coherent).astype(np.int8)
        self._lock = np.full(n, Lock.NONE, np.int8)
        self._started = False

    def process(self, turned: Turned) -> Choices:
        """The choices that have become known."""
        steps: list[NDArray[np.int8]] = []
        iq = turned.iq
        if turned.track.lock.shape[1]:
            self._locks.append(turned.track.lock)
        if iq.shape[1] and not self._started:
            self._started = True
            steps.append(self._now.copy())
        while iq.shape[1]:
            window, iq = self._windows.take(iq)
            if window is not None:
                self._decide(window)
                steps.append(self._now.copy())
        n = len(self._channels)
        return Choices(np.stack(steps, axis=1) if steps else np.zeros((n, 0), np.int8))

    def reasons(self) -> list[str]:
        """Why each channel is heard as it is, one plain line each, true of the last seconds."""
        sinad_db = self._smoothed_db(np.arange(len(self._channels)))
        return [
            in_words(
                Standing(
                    is_sided=channel.emission.side is not None,
                    chosen=channel.candidates[self._now[row]],
                    lock=Lock(int(self._lock[row])),
                    sinad_db=dict(zip(channel.candidates, sinad_db[row], strict=False)) if self._looks[row] else {},
                    noise=dict(zip(DETECTORS, self._noise[row], strict=True)),
                    carrier_to_noise_density=float(self._carrier_to_noise_density[row]),
                    deepest=float(self._deepest[row].min()),
                    sideways=float(self._sideways[row].max()),
                )
            )
            for row, channel in enumerate(self._channels)
        ]

    def _decide(self, window: NDArray[np.complex64]) -> None:
        locks = np.concatenate(self._locks, axis=1)
        step, self._locks = locks[:, :_STEP_HOPS], [locks[:, _STEP_HOPS:]]
        locked = (step == Lock.LOCKED).mean(axis=1) > 0.5
        none = (step == Lock.NONE).mean(axis=1) > 0.5
        # A step in which the carrier was found, or found again, was turned wrongly in part and is no guide.
        settled = locked & (self._lock == Lock.LOCKED)
        self._lock = np.where(locked, Lock.LOCKED, np.where(none, Lock.NONE, Lock.HELD)).astype(np.int8)
        unknown = self._looks == 0
        # Channels take turns, so that the work is spread; one that has just been locked is looked at at once.
        turn = np.arange(len(locked)) % _TURNS == self._steps % _TURNS
        self._steps += 1
        rows = np.flatnonzero(settled & (turn | unknown))
        self._now[locked & unknown] = self._coherent[locked & unknown]
        if len(rows):
            self._compare(rows, self._predictor.predict(window[rows], rows))
        free = none & (self._envelope >= 0)
        self._now[free] = self._envelope[free]
        self._looks[none] = 0

    def _compare(self, rows: Rows, latest: Prediction) -> None:
        """Weighs a new prediction of some channels, and changes their detectors where it is time."""
        self._take_in(rows, latest)
        sinad_db = self._smoothed_db(rows)
        each, now = np.arange(len(rows)), self._now[rows]
        best = sinad_db.argmax(axis=1).astype(np.int8)
        lead_db = sinad_db[each, best] - sinad_db[each, now]
        latest_db = self._sinad_db(rows, latest.message, latest.noise + latest.distortion)
        lead_now_db = latest_db[each, best] - latest_db[each, now]
        one_side = self._is_one_side[rows, best]
        ahead = lead_db > np.where(one_side, _ONE_SIDE_LEAD_DB, _LEAD_DB)
        going_on = ahead & ((best == self._leader[rows]) | (self._leading[rows] == 0))
        leading = np.where(going_on, self._leading[rows] + 1, 0)
        self._leader[rows] = best
        at_once = (np.minimum(lead_db, lead_now_db) > _AT_ONCE_DB) & ~one_side
        change = (leading >= np.where(one_side, _ONE_SIDE_PATIENCE, _PATIENCE)) | (ahead & at_once)
        quiet = sinad_db.max(axis=1) < _NOTHING_TO_HEAR_DB
        chosen = np.where(change & (self._looks[rows] > 1), best, now)
        # With nothing to hear the coherent detector waits: the envelope's bursts of distortion have yet to show.
        chosen = np.where(quiet, self._coherent[rows], chosen)
        self._leading[rows] = np.where(chosen != now, 0, leading)
        self._now[rows] = chosen

    def _take_in(self, rows: Rows, latest: Prediction) -> None:
        """Smooths a prediction with those before it; a channel's first ones count alike."""
        self._looks[rows] += 1
        weight = np.maximum(self._latest[rows], 1.0 / self._looks[rows])[:, None]
        self._carrier_to_noise_density[rows] = latest.carrier_to_noise_density
        for smoothed, new in (
            (self._message, latest.message), (self._noise, latest.noise), (self._distortion, latest.distortion)
        ):  # fmt: skip
            smoothed[rows] += weight * (new - smoothed[rows])
        for held, one, at_first in (
            (self._bursts, latest.distortion[:, ENVELOPE], 0.0),
            (self._deepest, latest.deepest, 1.0),
            (self._sideways, latest.sideways, 0.0),
        ):
            before = held[rows, 1:]
            before[self._looks[rows] == 1] = at_first
            held[rows] = np.concatenate([before, one[:, None]], axis=1)

    def _smoothed_db(self, rows: Rows) -> Floats:
        """Predicted SINAD of each candidate, the envelope's with its largest distortion in the last ten seconds."""
        distortion = self._distortion[rows]
        distortion[:, ENVELOPE] = self._bursts[rows].max(axis=1)
        return self._sinad_db(rows, self._message[rows], self._noise[rows] + distortion)

    def _sinad_db(self, rows: Rows, message: Floats, disturbance: Floats) -> Floats:
        ratio = (message + _TINY) / (disturbance + _TINY)
        of_candidates = np.take_along_axis(ratio, self._place[rows], axis=1)
        return np.where(self._offered[rows], 10.0 * np.log10(of_candidates), _UNKNOWN_DB)
