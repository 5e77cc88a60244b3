"""What a logbook takes from a group of channels on the way: I/Q, the squelch's decisions, and audio before the gate."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from rxchain.audio.rate_conversion import RateConverter
from rxchain.streams import Bools, ComplexBlock, FloatBlock


class Tap:
    """Audio of some rows before the gate, at the delivered rate: what a transmission sounded like before it opened."""

    def __init__(self, rows: Sequence[int], converter: RateConverter | None) -> None:
        self.rows, self._converter = list(rows), converter
        self._taken: list[FloatBlock] = []

    def take(self, audio: FloatBlock) -> None:
        """Takes the levelled audio of the whole group."""
        some = audio[self.rows]
        self._taken.append(some if self._converter is None else self._converter.process(some))

    def finish(self) -> None:
        """The converter's tail."""
        if self._converter is not None:
            self._taken.append(self._converter.flush())

    def empty(self) -> FloatBlock | None:
        """What has been taken since the last time, (rows, messages, n); None where there is nothing."""
        taken, self._taken = self._taken, []
        return np.concatenate(taken, axis=2) if taken else None


@dataclass(frozen=True, slots=True)
class TappedGroup:
    """New I/Q, complex64, (channels, n); squelch decisions, bool, (channels, steps); audio before the gate, float32,
    (channels, messages, m). Each follows on what came before; they do not reach equally far.
    """

    iq: ComplexBlock
    steps: Bools
    audio: FloatBlock | None


class GroupTap:
    """Gathers what passes through a group for a logbook."""

    def __init__(self, audio: Tap) -> None:
        self._audio = audio
        self.iq: list[ComplexBlock] = []
        self.steps: list[Bools] = []

    def take(self) -> TappedGroup | None:
        """What has been gathered; None where that is nothing."""
        audio = self._audio.empty()
        if not self.iq and not self.steps and audio is None:
            return None
        n = len(self._audio.rows)
        iq = np.concatenate(self.iq, axis=1) if self.iq else np.zeros((n, 0), np.complex64)
        steps = np.concatenate(self.steps, axis=1) if self.steps else np.zeros((n, 0), np.bool_)
        self.iq.clear()
        self.steps.clear()
        return TappedGroup(iq, steps, audio)
