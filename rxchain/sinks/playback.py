"""From the audio of all channels to what a speaker plays: two ears, any rate, never a click, never above the ceiling.

Every channel's latest audio is kept, so that another can be heard at once. One position in the stream serves all that are
heard; each is interpolated there, at its own rate, weighted and added. Every gain moves by ramps. The limiter comes after
the sum and the volume, which only ever lowers, after the limiter: nothing goes round it.
"""

from __future__ import annotations

import math
import threading
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rxchain.audio.limiter import LOOK_AHEAD_S, Limiter
from rxchain.kernels.sinc_interpolation import SincInterpolator
from rxchain.sinks.audio_tape import AudioTape
from rxchain.sinks.hearing import Hearing
from rxchain.sinks.playback_clock import PlaybackClock
from rxchain.streams import FloatBlock, Floats

CEILING_DBFS = -6.0  # what the gain control levels peaks to
START_VOLUME_DB = -20.0
PIECE_S = 0.005
_HALF = 32  # the interpolator's taps on either side
_KEEP_S = 1.0
_RISE, _FALL = 0.5, 1.0  # a gain's largest change in a piece: up in 10 ms, down in 5 ms
_VOLUME_STEP = 0.05
# Heard channels whose audio comes sooner or later by more than this are played from another place in the stream.
_EARLIER_S, _LATER_S = 0.002, 0.030


@dataclass(frozen=True, slots=True)
class Voice:
    """Audio of one channel: its sample rate and its number of messages."""

    rate_hz: float
    n_messages: int


class Playback:
    """What the speaker plays, piece by piece. One thread writes, one renders, any calls :meth:`hear`.

    rate_hz : the speaker's. What is heard, the volume and whether it is muted may be changed at any time.
    """

    def __init__(self, voices: Sequence[Voice], rate_hz: float, hearing: Hearing) -> None:
        self.rate_hz = rate_hz
        self._voices = tuple(voices)
        self._tapes = [AudioTape(v.n_messages, math.ceil(_KEEP_S * v.rate_hz)) for v in voices]
        self._sincs = {v.rate_hz: _interpolator(v.rate_hz, rate_hz) for v in voices}
        self._piece = math.ceil(PIECE_S * rate_hz)
        ramp = (np.arange(self._piece) + 1.0) / self._piece
        self._ramp: Floats = 0.5 - 0.5 * np.cos(np.pi * ramp)
        self.clock = PlaybackClock(self._piece / rate_hz)
        self._limiter = Limiter(1, 2, rate_hz, CEILING_DBFS, self._piece)
        self._lock = threading.Lock()
        self._wanted = self.hearing = hearing
        self._gains: dict[int, Floats] = {}
        self._master = self._volume = 0.0
        self.volume_db = START_VOLUME_DB
        self.muted = False
        self._rendered: FloatBlock = np.zeros((2, 0), np.float32)

    def write(self, place: int, audio: FloatBlock) -> None:
        """Takes new audio of one channel, float32, (messages, n)."""
        with self._lock:
            self._tapes[place].append(audio)

    def hear(self, hearing: Hearing) -> None:
        """Hears other channels from the next piece on."""
        self._wanted = hearing

    def newest_s(self, hearing: Hearing) -> float:
        """Stream time up to which all of these can be played; that of the latest channel where none is heard."""
        if not hearing.places:
            return max(map(self._known_s, range(len(self._voices))))
        return min(map(self._known_s, hearing.places))

    def render(self, n: int) -> FloatBlock:
        """The next ``n`` samples, float32, (n, 2), full scale 1.0."""
        while self._rendered.shape[1] < n:
            limited = self._limiter.process(self._mixed()[None])[0]
            self._rendered = np.concatenate([self._rendered, limited * self._lowered(limited.shape[1])], axis=1)
        ready, self._rendered = self._rendered[:, :n], self._rendered[:, n:]
        return np.ascontiguousarray(ready.T)

    @property
    def held_back_s(self) -> float:
        """Speaker time between a sample's being mixed and its being handed out."""
        return LOOK_AHEAD_S + float(self._rendered.shape[1]) / self.rate_hz

    def _known_s(self, place: int) -> float:
        rate_hz = self._voices[place].rate_hz
        known_s: float = (self._tapes[place].end - self._sincs[rate_hz].half) / rate_hz
        return known_s

    def _mixed(self) -> FloatBlock:
        """A piece of what is heard, (2, n), before the limiter."""
        silent = self._change_hearing()
        piece = self.clock.next(self.newest_s(self.hearing))
        before = self._master
        self._master = 0.0 if piece.is_last or silent or piece.start_s is None else min(1.0, before + _RISE)
        mixed = np.zeros((2, self._piece), np.float32)
        if piece.start_s is None:
            return mixed
        time_s: Floats = piece.start_s + np.arange(self._piece, dtype=np.float64) * (piece.speed / self.rate_hz)
        for place in dict.fromkeys((*self._gains, *self.hearing.places)):
            mixed += self._faded(place, time_s)
        return mixed * (before + (self._master - before) * self._ramp).astype(np.float32)

    def _change_hearing(self) -> bool:
        """Hears what is wanted; True while it must be silent first because the place in the stream changes."""
        wanted = self._wanted
        if wanted == self.hearing:
            return False
        difference_s = self.newest_s(wanted) - self.newest_s(self.hearing)
        if self.clock.is_playing and not -_EARLIER_S <= difference_s <= _LATER_S:
            if self._master > 0.0:
                return True
            self._gains = {}
            self.clock.shift(difference_s)
        self.hearing = wanted
        return False

    def _faded(self, place: int, time_s: Floats) -> FloatBlock:
        """A channel's share of both ears, (2, n), its gains on their way to what is wanted."""
        voice = self._voices[place]
        before = self._gains.get(place, np.zeros((2, voice.n_messages)))
        change = self.hearing.gains(place, voice.n_messages) - before
        after = before + np.clip(change, -_RISE, _RISE)
        if not after.any() and not change.any():
            self._gains.pop(place, None)
            return np.zeros((2, len(time_s)), np.float32)
        self._gains[place] = after
        sinc = self._sincs[voice.rate_hz]
        position = time_s * voice.rate_hz
        first = math.floor(position[0]) - sinc.half
        with self._lock:
            samples = self._tapes[place].read(first, math.floor(position[-1]) + sinc.half + 1).copy()
        audio = sinc.at(samples, first, position)
        gains = before[:, :, None] + (after - before)[:, :, None] * self._ramp
        return np.asarray((gains.astype(np.float32) * audio[None]).sum(axis=1))

    def _lowered(self, n: int) -> FloatBlock:
        """The volume over the next ``n`` samples."""
        wanted = 0.0 if self.muted else 10.0 ** (min(0.0, self.volume_db) / 20.0)
        before = self._volume
        self._volume = before + min(max(wanted - before, -_VOLUME_STEP), _VOLUME_STEP)
        if n == self._piece:
            return (before + (self._volume - before) * self._ramp).astype(np.float32)
        return np.linspace(before, self._volume, n + 1)[1:].astype(np.float32)


def _interpolator(rate_hz: float, output_rate_hz: float) -> SincInterpolator:
    step = rate_hz / output_rate_hz
    return SincInterpolator(step, math.ceil(_HALF * max(1.0, step)))
