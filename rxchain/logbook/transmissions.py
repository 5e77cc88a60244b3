"""Where a transmission begins and ends, from the squelch's decisions; and what of a channel's streams belongs to it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Bools

PRE_ROLL_S = 0.5
TAIL_S = 0.3  # of the time after the emission that is kept
SHORTEST_S = 0.4
LONGEST_S = 600.0
HANG_S = 1.0  # by which the squelch's closing comes after the emission's end


@dataclass(slots=True)
class Span:
    """A transmission in seconds of the channel's stream. begin_s, end_s : on the air; keep_from_s, keep_to_s : what is kept
    of it. is_cut : whether it went on when it was ended: too long, retuned, or the stream ended.
    """

    begin_s: float
    keep_from_s: float
    end_s: float = float("nan")
    keep_to_s: float = float("nan")
    is_cut: bool = False

    @property
    def is_over(self) -> bool:
        """Whether its end is known."""
        return bool(np.isfinite(self.end_s))

    @property
    def is_worth_keeping(self) -> bool:
        """Whether it lasted long enough to be one."""
        return self.end_s - self.begin_s >= SHORTEST_S


class TransmissionCutter:
    """Cuts one channel's time into transmissions.

    step_s : of the squelch. take(steps) : bool, (n,); returns the spans that have begun and those that are over, in order.
    """

    def __init__(self, step_s: float) -> None:
        self._step_s = step_s
        self._steps = 0
        self.span: Span | None = None

    @property
    def seconds(self) -> float:
        """How far the decisions reach."""
        return self._steps * self._step_s

    def take(self, steps: Bools) -> list[Span]:
        """Spans that began or ended within these decisions; one that does both is there once."""
        touched: list[Span] = []
        for is_open in steps:
            if is_open and self.span is None:
                self._begin(touched, self.seconds)
            elif not is_open and self.span is not None:
                self._end(self.seconds - HANG_S, self.seconds - HANG_S + TAIL_S)
            self._steps += 1
            if self.span is not None and self.seconds - self.span.begin_s >= LONGEST_S:
                self._end(self.seconds, self.seconds, is_cut=True)
                self._begin(touched, self.seconds, keep_from_s=self.seconds)
        return touched

    def stop(self) -> None:
        """The stream ends here, and with it a transmission that is on."""
        if self.span is not None:
            self._end(self.seconds, self.seconds, is_cut=True)

    def _begin(self, touched: list[Span], begin_s: float, keep_from_s: float | None = None) -> None:
        self.span = Span(begin_s, max(0.0, begin_s - PRE_ROLL_S) if keep_from_s is None else keep_from_s)
        touched.append(self.span)

    def _end(self, end_s: float, keep_to_s: float, is_cut: bool = False) -> None:
        if self.span is not None:
            self.span.end_s = max(end_s, self.span.begin_s + self._step_s)
            self.span.keep_to_s = max(keep_to_s, self.span.end_s)
            self.span.is_cut = is_cut
        self.span = None


class Reel:
    """The latest of a stream, by sample index, and all of it while someone still wants it.

    rate_hz : of the stream, whose samples lie along the last axis. hold_s : how much is kept for a span that may begin.
    """

    def __init__(self, rate_hz: float, hold_s: float) -> None:
        self.rate_hz, self._hold = rate_hz, round(hold_s * rate_hz)
        self._pieces: list[tuple[int, NDArray[np.generic]]] = []
        self.index = 0  # of the sample to come

    @property
    def seconds(self) -> float:
        """How far the stream has come."""
        return self.index / self.rate_hz

    def push(self, piece: NDArray[np.generic]) -> None:
        """Takes what follows."""
        if piece.shape[-1]:
            self._pieces.append((self.index, piece))
            self.index += piece.shape[-1]

    def between(self, first: int, last: int) -> list[NDArray[np.generic]]:
        """Samples ``[first, last)`` as far as they are still there."""
        parts = []
        for index, piece in self._pieces:
            a, b = max(0, first - index), min(piece.shape[-1], last - index)
            if b > a:
                parts.append(piece[..., a:b])
        return parts

    def forget(self, before: int | None = None) -> None:
        """Lets go of what no span can want any more: all before ``before`` and older than the hold."""
        limit = self.index - self._hold if before is None else min(before, self.index - self._hold)
        while self._pieces and self._pieces[0][0] + self._pieces[0][1].shape[-1] <= limit:
            self._pieces.pop(0)
