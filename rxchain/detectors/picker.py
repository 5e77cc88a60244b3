"""Which detector each channel is heard through: predict, compare, change slowly.

Predictions are smoothed over a second or so; another detector takes over when it leads by half a decibel for a second
(by one and a half where it hears one sideband alone), or at once when it leads by three both smoothed and now. Without a
carrier to follow there is nothing to choose: the envelope needs none. In a fade that is flown through, things stay.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.hops import hop_samples
from rxchain.carrier.track import Lock, Turned
from rxchain.detectors.prediction import PickedChannel, Prediction, Predictor
from rxchain.kernels.overlap_save import Windows
from rxchain.streams import Bools, Floats

__all__ = ["Choices", "DetectorPicker", "PickedChannel"]

_STEP_HOPS = 48  # 0.26 s
_MEMORY = 0.2  # weight of the latest step: about 1.2 s
_LEAD_DB, _ONE_SIDE_LEAD_DB, _AT_ONCE_DB = 0.5, 1.5, 3.0
_PATIENCE_STEPS = 4
_DISTORTION_STEPS = 40  # envelope distortion comes in bursts: the largest of the last 10 s counts
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
        self._worst: deque[Floats] = deque(maxlen=_DISTORTION_STEPS)
        self._now = np.where(self._envelope >= 0, self._envelope, self._coherent).astype(np.int8)
        self._prediction: Prediction | None = None
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
        prediction = self._predictor.predict(window)
        self._prediction = prediction
        present_db = self._with_worst_distortion(prediction)
        newly = locked & ~self._is_locked & np.isnan(self._smoothed).all(axis=1)
        fresh = np.isnan(self._smoothed)
        smoothed = np.where(fresh, present_db, self._smoothed + _MEMORY * (present_db - self._smoothed))
        self._smoothed = np.where(locked[:, None], smoothed, self._smoothed)
        self._is_locked = locked
        rows = np.arange(len(self._channels))
        filled = np.where(np.isnan(self._smoothed), _UNKNOWN_DB, self._smoothed)
        best = filled.argmax(axis=1).astype(np.int8)
        lead_db = filled[rows, best] - filled[rows, self._now]
        lead_now_db = np.nan_to_num(present_db[rows, best] - present_db[rows, self._now])
        wanted_db = np.where(self._is_one_side[rows, best], _ONE_SIDE_LEAD_DB, _LEAD_DB)
        ahead = locked & (lead_db > wanted_db)
        self._leading = np.where(ahead & ((best == self._leader) | (self._leading == 0)), self._leading + 1, 0)
        self._leader = best
        change = (self._leading >= _PATIENCE_STEPS) | (ahead & (lead_db > _AT_ONCE_DB) & (lead_now_db > _AT_ONCE_DB))
        quiet = filled.max(axis=1) < _NOTHING_TO_HEAR_DB
        now = np.where(change & ~quiet, best, self._now)
        # At first lock the coherent detector is taken up: the envelope's bursts of distortion have yet to show.
        now = np.where(newly | (locked & quiet), self._coherent, now)
        now = np.where(none & (self._envelope >= 0), self._envelope, now)
        self._leading[now != self._now] = 0
        self._smoothed[none] = np.nan
        self._now = now.astype(np.int8)

    def _with_worst_distortion(self, prediction: Prediction) -> Floats:
        """Predicted SINAD, the envelope's with the largest share of distortion in the last ten seconds."""
        share = prediction.envelope_distortion / prediction.message
        self._worst.append(np.where(np.isfinite(share), share, 0.0))
        worst = np.max(self._worst, axis=0)
        sinad_db = prediction.sinad_db.copy()
        rows = np.flatnonzero(self._envelope >= 0)
        with_worst = 1.0 / (prediction.noise[rows] / prediction.message[rows] + worst[rows])
        sinad_db[rows, self._envelope[rows]] = 10.0 * np.log10(np.maximum(with_worst, 1e-12))
        return sinad_db

    def _reason(self, row: int) -> str:
        channel, prediction = self._channels[row], self._prediction
        chosen = channel.candidates[self._now[row]]
        if prediction is None or not self._is_locked[row]:
            if chosen == "envelope":
                return "no carrier followed: the envelope needs none"
            return "the carrier is in a fade: carried on as before"
        others = [k for k in range(len(channel.candidates)) if k != self._now[row]]
        lead_db = float(self._smoothed[row, self._now[row]] - np.nanmax(self._smoothed[row, others]))
        if chosen in ("upper", "lower"):
            return f"the {chosen} sideband alone is {lead_db:.1f} dB cleaner: the other one is disturbed or faded"
        deepest = float(prediction.deepest[row])
        if chosen == "envelope":
            return f"the carrier's phase is unsteady: the envelope is {lead_db:.1f} dB ahead"
        if lead_db < _LEAD_DB:
            return f"carrier locked; the envelope would do as well (within {max(abs(lead_db), 0.1):.1f} dB)"
        if channel.emission.side is not None:
            return f"sidebands are unequal: the envelope's distortion would cost {lead_db:.1f} dB"
        if deepest < -0.02:
            return f"over-modulated to {100 * (1 - deepest):.0f} %: the folded envelope would cost {lead_db:.1f} dB"
        return f"carrier locked: the envelope would cost {lead_db:.1f} dB"
