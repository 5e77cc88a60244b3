"""Which detector each channel is heard through: predict, compare, change slowly.

Predictions are smoothed over a second or so; another detector takes over when it leads by half a decibel for a second
(by one and a half where it hears one sideband alone), or at once when it leads by three both smoothed and now. Without a
carrier to follow there is nothing to choose: the envelope needs none. In a fade that is flown through, things stay.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.hops import hop_samples
from rxchain.carrier.track import Lock, Turned
from rxchain.detectors.prediction import PickedChannel, Prediction, Predictor, Rows
from rxchain.kernels.overlap_save import Windows
from rxchain.streams import Bools, Floats

__all__ = ["Choices", "DetectorPicker", "PickedChannel"]

_STEP_HOPS = 48  # 0.26 s
_TURNS = 4  # a channel is looked at every fourth step: once a second
_MEMORY = 0.6  # weight of the latest look: about 1.2 s
_LEAD_DB, _ONE_SIDE_LEAD_DB, _AT_ONCE_DB = 0.5, 1.5, 3.0
_PATIENCE = 2  # looks
_DISTORTION_LOOKS = 10  # envelope distortion comes in bursts: the largest of the last 10 s counts
_NOTHING_TO_HEAR_DB = 0.0
_UNKNOWN_DB = -200.0


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
        self._envelope = np.array([c.index("envelope") if "envelope" in c else -1 for c in names])
        self._coherent = np.array([c.index("coherent") if "coherent" in c else 0 for c in names])
        self._is_one_side: Bools = np.array([[name in ("upper", "lower") for name in c] for c in names])
        self.reset()

    def reset(self) -> None:
        """As new, with the same channels."""
        n, most = len(self._channels), max(len(channel.candidates) for channel in self._channels)
        self._windows.reset()
        self._locks: list[NDArray[np.int8]] = []
        self._smoothed: Floats = np.full((n, most), np.nan)
        self._leading = np.zeros(n, np.int64)
        self._leader = np.zeros(n, np.int8)
        self._shares = np.zeros((n, _DISTORTION_LOOKS))
        self._deepest = np.ones(n)
        self._steps = 0
        self._now = np.where(self._envelope >= 0, self._envelope, self._coherent).astype(np.int8)
        self._is_locked: Bools = np.zeros(n, bool)
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
        return [self._reason(row) for row in range(len(self._channels))]

    def _decide(self, window: NDArray[np.complex64]) -> None:
        locks = np.concatenate(self._locks, axis=1)
        step, self._locks = locks[:, :_STEP_HOPS], [locks[:, _STEP_HOPS:]]
        locked = (step == Lock.LOCKED).mean(axis=1) > 0.5
        none = (step == Lock.NONE).mean(axis=1) > 0.5
        unknown = np.isnan(self._smoothed).all(axis=1)
        # Channels take turns, so that the work is spread; one that has just been locked is looked at at once.
        turn = np.arange(len(locked)) % _TURNS == self._steps % _TURNS
        self._steps += 1
        rows = np.flatnonzero(locked & (turn | unknown))
        if len(rows):
            self._compare(rows, self._predictor.predict(window[rows], rows))
        now = np.where(locked & unknown, self._coherent, self._now)
        now = np.where(none & (self._envelope >= 0), self._envelope, now)
        self._smoothed[none] = np.nan
        self._is_locked = locked
        self._now = now.astype(np.int8)

    def _compare(self, rows: Rows, prediction: Prediction) -> None:
        """Weighs a new prediction of some channels, and changes their detectors where it is time."""
        present_db = self._with_worst_distortion(rows, prediction)
        before = self._smoothed[rows]
        first = np.isnan(before).all(axis=1)
        smoothed = np.where(np.isnan(before), present_db, before + _MEMORY * (present_db - before))
        self._smoothed[rows] = smoothed
        self._deepest[rows] = prediction.deepest
        each = np.arange(len(rows))
        filled = np.where(np.isnan(smoothed), _UNKNOWN_DB, smoothed)
        best = filled.argmax(axis=1).astype(np.int8)
        now = self._now[rows]
        lead_db = filled[each, best] - filled[each, now]
        lead_now_db = np.nan_to_num(present_db[each, best] - present_db[each, now])
        ahead = lead_db > np.where(self._is_one_side[rows, best], _ONE_SIDE_LEAD_DB, _LEAD_DB)
        going_on = ahead & ((best == self._leader[rows]) | (self._leading[rows] == 0))
        leading = np.where(going_on, self._leading[rows] + 1, 0)
        self._leader[rows] = best
        change = (leading >= _PATIENCE) | (ahead & (lead_db > _AT_ONCE_DB) & (lead_now_db > _AT_ONCE_DB))
        quiet = filled.max(axis=1) < _NOTHING_TO_HEAR_DB
        chosen = np.where(change & ~quiet & ~first, best, now)
        # With nothing to hear the coherent detector waits: the envelope's bursts of distortion have yet to show.
        chosen = np.where(quiet, self._coherent[rows], chosen)
        self._leading[rows] = np.where(chosen != now, 0, leading)
        self._now[rows] = chosen

    def _with_worst_distortion(self, rows: Rows, prediction: Prediction) -> Floats:
        """Predicted SINAD, the envelope's with the largest share of distortion in the last ten seconds."""
        share = np.nan_to_num(prediction.envelope_distortion / prediction.message, posinf=0.0)
        self._shares[rows] = np.concatenate([self._shares[rows, 1:], share[:, None]], axis=1)
        sinad_db = prediction.sinad_db.copy()
        has = self._envelope[rows] >= 0
        with_worst = 1.0 / (prediction.noise / prediction.message + self._shares[rows].max(axis=1))
        sinad_db[has, self._envelope[rows][has]] = 10.0 * np.log10(np.maximum(with_worst[has], 1e-12))
        return sinad_db

    def _reason(self, row: int) -> str:
        channel = self._channels[row]
        chosen = channel.candidates[self._now[row]]
        if not self._is_locked[row] or np.isnan(self._smoothed[row]).all():
            if chosen == "envelope":
                return "no carrier followed: the envelope needs none"
            return "the carrier is in a fade: carried on as before"
        others = [k for k in range(len(channel.candidates)) if k != self._now[row]]
        lead_db = float(self._smoothed[row, self._now[row]] - np.nanmax(self._smoothed[row, others]))
        if chosen in ("upper", "lower"):
            return f"the {chosen} sideband alone is {lead_db:.1f} dB cleaner: the other one is disturbed or faded"
        deepest = float(self._deepest[row])
        if chosen == "envelope":
            return f"the carrier's phase is unsteady: the envelope is {lead_db:.1f} dB ahead"
        if lead_db < _LEAD_DB:
            return f"carrier locked; the envelope would do as well (within {max(abs(lead_db), 0.1):.1f} dB)"
        if channel.emission.side is not None:
            return f"sidebands are unequal: the envelope's distortion would cost {lead_db:.1f} dB"
        if deepest < -0.02:
            return f"over-modulated to {100 * (1 - deepest):.0f} %: the folded envelope would cost {lead_db:.1f} dB"
        return f"carrier locked: the envelope would cost {lead_db:.1f} dB"
