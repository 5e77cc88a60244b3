"""Feeds a receiver from a source until the source ends, breaks off, or someone asks to stop."""

from __future__ import annotations

import datetime as dt
import threading
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from rxchain.chain.commands import Commands
from rxchain.chain.receiver import ChannelAudio, Receiver
from rxchain.chain.status import ReceiverStatus, SoundStatus
from rxchain.errors import FaultError
from rxchain.sources.health import SourceHealth
from rxchain.sources.protocol import Source

_STATUS_EVERY_S = 0.25


class AudioSink(Protocol):
    """Takes the audio of every channel as it comes."""

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio of one channel; raises :class:`FaultError` where it cannot."""
        ...


@dataclass(frozen=True, slots=True)
class Outcome:
    """How a run ended: ``fault`` says what stopped it, None where it came to its end or was asked to stop."""

    stopped: bool
    fault: FaultError | None


class Runner:
    """Runs a receiver on a source; everything numeric happens in the thread that calls :meth:`run`.

    clock : seconds, steadily rising; paces the snapshots. show : takes a snapshot now and then; None: nobody looks.
    commands : carried out before each block. after_block : called in the numeric thread after each block and after the last.
    health : asks how it stands with the source. sound : asks how it stands with the sound.
    """

    def __init__(
        self,
        source: Source,
        receiver: Receiver,
        sink: AudioSink,
        clock: Callable[[], float],
        show: Callable[[ReceiverStatus], None] | None = None,
        health: Callable[[], SourceHealth] = SourceHealth,
        sound: Callable[[], SoundStatus | None] = lambda: None,
        after_block: Callable[[], None] = lambda: None,
        commands: Commands | None = None,
    ) -> None:
        self._source, self._receiver, self._sink = source, receiver, sink
        self._clock, self._show, self._health = clock, show, health
        self._sound = sound
        self._after_block = after_block
        self._commands = commands or Commands()
        self._stop = threading.Event()
        self._started = 0.0
        self._shown = -float("inf")

    def stop(self) -> None:
        """Asks the run to end after the block in hand; from any thread or signal handler."""
        self._stop.set()

    def run(self) -> Outcome:
        """Receives to the end. What was received is delivered and measured, whatever ended it."""
        self._started = self._clock()
        fault: FaultError | None = None
        try:
            for block in self._source.blocks():
                self._commands.run_all()
                self._deliver(self._receiver.process(block))
                self._after_block()
                self._maybe_show()
                if self._stop.is_set():
                    break
        except FaultError as error:
            fault = error
        finally:
            self._source.close()
        try:
            self._deliver(self._receiver.flush())
            self._after_block()
        except FaultError as error:
            fault = fault or error
        self._receiver.measure(overall=True)
        if self._show is not None:
            self._show(self.status())
        return Outcome(self._stop.is_set(), fault)

    def status(self) -> ReceiverStatus:
        """A snapshot; call it from the numeric thread."""
        receiver, info = self._receiver, self._receiver.info
        health = self._health()
        elapsed_s, spent_s = receiver.elapsed_s, self._clock() - self._started
        total_s = info.n_samples / info.sample_rate_hz if info.n_samples else None
        return ReceiverStatus(
            source=info.name,
            sample_rate_hz=info.sample_rate_hz,
            centre_hz=info.centre_hz,
            start=info.start,
            elapsed_s=elapsed_s,
            progress=min(1.0, elapsed_s / total_s) if total_s else None,
            speed=elapsed_s / spent_s if spent_s > 0 else None,
            samples_lost=receiver.samples_lost,
            gaps=receiver.gaps,
            overload_fraction=receiver.overload_fraction,
            late_blocks=health.late,
            spectrum_dbfs=receiver.spectrum_dbfs(),
            channels=tuple(receiver.channel_status(place) for place in range(len(receiver.channels))),
            source_trouble=health.trouble,
            short_buffers=health.short,
            reopened=health.reopened,
            gain_db=health.gain_db,
            sound=self._sound(),
        )

    def _deliver(self, audio: list[ChannelAudio]) -> None:
        for piece in audio:
            self._sink.write(piece)

    def _maybe_show(self) -> None:
        if self._show is None or self._clock() - self._shown < _STATUS_EVERY_S:
            return
        self._receiver.measure(overall=False)
        self._show(self.status())
        self._shown = self._clock()


def span_text(receiver: Receiver) -> str:
    """From when to when a run received, in words."""
    start, seconds = receiver.info.start, receiver.elapsed_s
    if start is None:
        return f"received from 0.000 s to {seconds:.3f} s of the stream"
    return f"received from {_clock_text(start)} to {_clock_text(start + dt.timedelta(seconds=seconds))}"


def _clock_text(time: dt.datetime) -> str:
    return time.astimezone(dt.UTC).strftime("%Y-%m-%d %H:%M:%S.%f")[:-3] + " UTC"
