"""One channel's way into the logbook: its streams on reels, its transmissions cut out of them into clips."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from rxchain.chain.channel_group import ChannelGroup
from rxchain.logbook.clips import Clip
from rxchain.logbook.transmissions import PRE_ROLL_S, Reel, Span, TransmissionCutter
from rxchain.streams import Bools, ComplexBlock, FloatBlock

_LAG_S = 1.5  # by which audio and decisions may run behind the I/Q
_SETTLED_S = 0.6  # after a transmission's end its figures are complete


@dataclass(slots=True)
class Open:
    """A transmission that is being written. clip : None once the disk was full. written : samples of audio and of I/Q so
    far, from where it begins to be kept.
    """

    span: Span
    key: str
    about: dict[str, Any]
    clip: Clip | None
    audio_to: int
    iq_to: int


class ChannelLog:
    """Follows one channel in one group; a channel that goes over to another group gets a new one.

    group, row : where it is received. keeps_all : one endless transmission an hour in place of those that are heard.
    """

    def __init__(self, group: ChannelGroup, row: int, keeps_all: bool) -> None:
        self.group, self.row, self.keeps_all = group, row, keeps_all
        hold_s = PRE_ROLL_S + _LAG_S
        self.iq, self.audio = Reel(group.rate_hz, hold_s), Reel(group.audio_rate_hz, hold_s)
        self.cutter = TransmissionCutter(group.squelch_step_s)
        self.first_s = group.first_index / group.rate_hz
        self.begun: list[Span] = []
        self.open: list[Open] = []

    def take(self, iq: ComplexBlock, steps: Bools, audio: FloatBlock | None) -> list[Span]:
        """Takes what the channel's group made; returns transmissions that have begun."""
        self.iq.push(iq)
        if audio is not None:
            self.audio.push(audio)
        return [] if self.keeps_all else self.cutter.take(steps)

    def write(self, one: Open) -> None:
        """Writes what has come of a transmission since the last time; raises :class:`OSError` where the disk is full."""
        if one.clip is None:
            return
        for reel, to in ((self.audio, one.audio_to), (self.iq, one.iq_to)):
            limit = round(one.span.keep_to_s * reel.rate_hz) if one.span.is_over else reel.index
            for piece in reel.between(to, limit):
                if reel is self.audio:
                    one.clip.write_audio(piece)  # type: ignore[arg-type]
                elif not self.keeps_all:
                    one.clip.write_iq(piece)  # type: ignore[arg-type]
        one.audio_to = max(one.audio_to, min(self.audio.index, self._limit(one, self.audio)))
        one.iq_to = max(one.iq_to, min(self.iq.index, self._limit(one, self.iq)))

    def is_complete(self, one: Open, at_end: bool) -> bool:
        """Whether all of an ended transmission has come, and its figures are known."""
        if not one.span.is_over:
            return False
        if at_end:
            return True
        has_all = self.audio.seconds >= one.span.keep_to_s and self.iq.seconds >= one.span.keep_to_s
        return has_all and self.decided_s >= one.span.end_s + _SETTLED_S

    @property
    def decided_s(self) -> float:
        """How far the channel has been followed."""
        return self.audio.seconds if self.keeps_all else self.cutter.seconds

    def forget(self) -> None:
        """Lets go of what nobody needs."""
        for reel, tos in (
            (self.audio, [one.audio_to for one in self.open]),
            (self.iq, [one.iq_to for one in self.open]),
        ):
            reel.forget(min(tos) if tos else None)

    def _limit(self, one: Open, reel: Reel) -> int:
        return round(one.span.keep_to_s * reel.rate_hz) if one.span.is_over else reel.index
