"""A running guess for each channel: from the first second, every second, over the last five at most."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rxchain.identify.measurements import LEAST_S, MOST_S, measure
from rxchain.identify.naming import CANT_TELL, SURE, Guess, name_all
from rxchain.identify.window import REACH_HZ, prepare_window
from rxchain.streams import ComplexBlock

EVERY_S = 1.0
_PATIENCE_S = 3.0  # no guess is firm before; at one second two in a hundred are wrong and sure of it
_AT_A_TIME = 4  # channels measured together: more would not fit the processor's cache
_CHANGED = 2  # guesses running that must name something else before a firm name is given up
_WEAK_IMPULSES = 0.01  # blanked share above which nothing is firm


@dataclass(slots=True)
class _Memory:
    held: Guess | None = None  # the firm guess in force
    last: str = ""
    against: int = 0


class RunningIdentifier:
    """Names what a group of channels holds.

    rate_hz : of the channels, flat over at least ±5.6 kHz where it is high enough. reach_hz : how far a carrier may lie
    from the middle. A guess is firm when two in a row agree, surely, on 3 s or more, or after 5 s; a firm name gives way
    to another after two guesses for that.
    """

    def __init__(self, n_channels: int, rate_hz: float, reach_hz: float = REACH_HZ) -> None:
        self._rate_hz, self._reach_hz = rate_hz, reach_hz
        self._n_channels = n_channels
        self._every, self._most = round(EVERY_S * rate_hz), round(MOST_S * rate_hz)
        self._least = round(LEAST_S * rate_hz)
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._held: ComplexBlock = np.zeros((self._n_channels, 0), np.complex64)
        self._until_next = self._every
        self._memory = [_Memory() for _ in range(self._n_channels)]

    def process(self, iq: ComplexBlock) -> list[tuple[int, list[Guess]]]:
        """Takes in samples, complex64, (channels, n); returns guesses, one a channel, with how many of those samples had
        gone by when each list was made.
        """
        made, done = [], 0
        while iq.shape[1] - done >= self._until_next:
            self._hold(iq[:, done : done + self._until_next])
            done += self._until_next
            self._until_next = self._every
            made.append((done, self._guess(range(self._n_channels))))
        self._hold(iq[:, done:])
        self._until_next -= iq.shape[1] - done
        return made

    def forget(self, channel: int) -> None:
        """What a channel held is no longer of interest: it was retuned."""
        self._held[channel] = 0.0
        self._memory[channel] = _Memory()

    def _hold(self, iq: ComplexBlock) -> None:
        self._held = np.concatenate([self._held, iq], axis=1)[:, -self._most :]

    def _guess(self, channels: Sequence[int]) -> list[Guess]:
        guesses: list[Guess] = []
        for first in range(0, len(channels), _AT_A_TIME):
            some = channels[first : first + _AT_A_TIME]
            prepared = [prepare_window(self._held[k], self._rate_hz, self._reach_hz) for k in some]
            named = name_all(measure(np.stack([one.iq for one in prepared])))
            for channel, window, guess in zip(some, prepared, named, strict=True):
                shifted = replace(guess, reference_hz=guess.reference_hz + window.shift_hz)
                guesses.append(self._settled(channel, shifted, window.impulse_share))
        return guesses

    def _settled(self, channel: int, guess: Guess, impulse_share: float) -> Guess:
        memory = self._memory[channel]
        agrees = guess.name == memory.last and guess.confidence >= SURE and guess.seconds >= _PATIENCE_S
        is_firm = guess.name != CANT_TELL and impulse_share < _WEAK_IMPULSES and (agrees or guess.seconds >= MOST_S)
        memory.last = guess.name
        if memory.held is None:
            if is_firm:
                memory.held = replace(guess, firm=True)
            return memory.held or guess
        if guess.name == memory.held.name:
            memory.against = 0
            memory.held = replace(guess, firm=True)
            return memory.held
        memory.against += is_firm and guess.confidence >= SURE
        if memory.against >= _CHANGED:
            memory.held, memory.against = replace(guess, firm=True), 0
        return memory.held
