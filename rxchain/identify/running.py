"""A running guess for each channel: from the first second, every second, over the last five at most."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from rxchain.identify.measurements import MOST_S, measure
from rxchain.identify.naming import CANT_TELL, NOISE_ONLY, SURE, Guess, name_all
from rxchain.identify.window import REACH_HZ, prepare_window
from rxchain.streams import ComplexBlock

EVERY_S = 1.0
_WATCHED_EVERY = 2  # of these times a firm name is doubted, oftener once there is doubt
_PATIENCE_S = 3.0  # no guess is firm before: at one second two in a hundred are wrong and sure of it
_WATCH_S = 2.0  # of a channel whose name is firm so much is looked at, for another emission
_CHANGED = 2  # looks running that must name something else before a firm name is given up
_AT_A_TIME = 4  # channels measured together: more would not fit the processor's cache
_MANY_IMPULSES = 0.01  # blanked share above which nothing is firm


@dataclass(slots=True)
class _Memory:
    samples: int = 0  # of the held stretch that belong to what is there now
    firm: Guess | None = None
    last: str = ""
    against: int = 0


class RunningIdentifier:
    """Names what a group of channels holds.

    rate_hz : of the channels, flat over at least ±5.6 kHz where it is high enough. reach_hz : how far a carrier may lie
    from the middle. keep_hz : each channel's own band; what lies beyond is its neighbours'. A guess is firm when two in a
    row agree, surely, on 3 s or more, or after 5 s; a firm name gives way to another emission after two looks at 2 s.
    """

    def __init__(self, keep_hz: list[tuple[float, float] | None], rate_hz: float, reach_hz: float = REACH_HZ) -> None:
        self._keep_hz, self._rate_hz, self._reach_hz = keep_hz, rate_hz, reach_hz
        self._every, self._most = round(EVERY_S * rate_hz), round(MOST_S * rate_hz)
        self.reset()

    def reset(self) -> None:
        """As new."""
        n = len(self._keep_hz)
        self._held: ComplexBlock = np.zeros((n, 0), np.complex64)
        self._until_next = self._every
        self._times = 0
        self._memories = [_Memory() for _ in range(n)]

    def process(self, iq: ComplexBlock) -> list[list[Guess]]:
        """Takes in samples, complex64, (channels, n); returns the guesses that fell due, each time one a channel."""
        made = []
        while iq.shape[1] >= self._until_next:
            self._hold(iq[:, : self._until_next])
            iq = iq[:, self._until_next :]
            self._until_next = self._every
            made.append(self._guesses())
        self._hold(iq)
        self._until_next -= iq.shape[1]
        return made

    def _hold(self, iq: ComplexBlock) -> None:
        self._held = np.concatenate([self._held, iq], axis=1)[:, -self._most :]
        for memory in self._memories:
            memory.samples = min(self._most, memory.samples + iq.shape[1])

    def _guesses(self) -> list[Guess]:
        """All channels', those with windows of the same length measured together."""
        watched = round(_WATCH_S * self._rate_hz)
        self._times += 1
        rests = self._times % _WATCHED_EVERY != 0
        guesses = {
            k: one.firm for k, one in enumerate(self._memories) if one.firm is not None and rests and not one.against
        }
        lengths = [min(one.samples, watched) if one.firm else one.samples for one in self._memories]
        for k in guesses:
            lengths[k] = 0
        for length in set(lengths) - {0}:
            channels = [k for k, one in enumerate(lengths) if one == length]
            for first in range(0, len(channels), _AT_A_TIME):
                some = channels[first : first + _AT_A_TIME]
                windows = [
                    prepare_window(self._held[k, -length:], self._rate_hz, self._reach_hz, self._keep_hz[k])
                    for k in some
                ]
                named = name_all(measure(np.stack([one.iq for one in windows])))
                for k, window, guess in zip(some, windows, named, strict=True):
                    placed = replace(guess, reference_hz=guess.reference_hz + window.shift_hz)
                    guesses[k] = self._settled(self._memories[k], placed, window.impulse_share)
        return [guesses[k] for k in range(len(lengths))]

    def _settled(self, memory: _Memory, guess: Guess, impulse_share: float) -> Guess:
        if memory.firm is not None:
            return self._watched(memory, memory.firm, guess)
        agrees = guess.name == memory.last and guess.confidence >= SURE and guess.seconds >= _PATIENCE_S
        memory.last = guess.name
        if guess.name != CANT_TELL and impulse_share < _MANY_IMPULSES and (agrees or guess.seconds >= MOST_S):
            memory.firm = guess = replace(guess, firm=True)
        return guess

    def _watched(self, memory: _Memory, firm: Guess, guess: Guess) -> Guess:
        """The firm guess, unless another emission has come; one that has gone off the air keeps its name."""
        is_other = guess.name not in (firm.name, NOISE_ONLY, CANT_TELL) and guess.confidence >= SURE
        memory.against = memory.against + 1 if is_other else 0
        if memory.against < _CHANGED:
            return firm
        memory.firm, memory.last, memory.against = None, guess.name, 0
        memory.samples = round(_WATCH_S * self._rate_hz)
        return guess
