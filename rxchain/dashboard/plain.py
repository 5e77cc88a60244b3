"""Progress as plain lines, for pipes, logs and terminals that cannot be drawn on."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

from rxchain.chain.status import ChannelStatus, ReceiverStatus, SoundStatus
from rxchain.dashboard.wording import LOCK_WORDS, clean, duration, frequency, with_uncertainty

_EVERY_S = 10.0


class PlainLines:
    """A line of progress every ten seconds of a run's own time, and at the end a line a channel."""

    wants_status = True

    def __init__(self, output: TextIO, clock: Callable[[], float]) -> None:
        self._output, self._clock = output, clock
        self._next_s = clock() + _EVERY_S
        self._last: ReceiverStatus | None = None
        self._broken = False

    def show(self, status: ReceiverStatus) -> None:
        """Takes a snapshot; prints it when its time has come."""
        self._last = status
        if self._clock() >= self._next_s:
            self._next_s = self._clock() + _EVERY_S
            self._print(progress_line(status))

    @contextmanager
    def running(self, stop: Callable[[], None]) -> Iterator[None]:
        """Prints while the body runs; a reader that goes away ends the printing, not the run."""
        try:
            yield
        finally:
            if self._last is not None:
                self._print(progress_line(self._last))
                for channel in self._last.channels:
                    self._print(channel_line(channel))

    def _print(self, line: str) -> None:
        if self._broken:
            return
        try:
            print(line, file=self._output, flush=True)
        except (BrokenPipeError, ValueError):
            self._broken = True
        except UnicodeEncodeError:
            print(line.encode("ascii", "replace").decode(), file=self._output, flush=True)


class Nothing:
    """Shows nothing."""

    wants_status = False

    def show(self, status: ReceiverStatus) -> None:
        """Takes a snapshot and drops it."""

    @contextmanager
    def running(self, stop: Callable[[], None]) -> Iterator[None]:
        """Lets the body run."""
        yield


def progress_line(status: ReceiverStatus) -> str:
    """How far a run has come, and what went wrong."""
    parts = [f"{clean(status.source)}: {duration(status.elapsed_s)} received"]
    if status.progress is not None:
        parts.append(f"{100 * status.progress:.0f} %")
    if status.speed is not None:
        parts.append(f"{status.speed:.1f} times real time")
    if status.gaps:
        parts.append(f"{status.samples_lost} samples lost in {status.gaps} gap(s)")
    if status.overload_fraction > 0:
        parts.append(f"overload {100 * status.overload_fraction:.2g} %")
    if status.late_blocks:
        parts.append(f"{status.late_blocks} blocks late")
    if status.short_buffers:
        parts.append(f"{status.short_buffers} buffers short")
    if status.reopened:
        parts.append(f"receiver lost and found again {status.reopened} time(s)")
    if status.gain_db is not None:
        parts.append(f"gain {status.gain_db:.1f} dB")
    if status.source_trouble is not None:
        parts.append(f"NO SAMPLES: {clean(status.source_trouble)}")
    if status.sound is not None:
        parts.append(sound_text(status.sound))
    return ", ".join(parts)


def sound_text(sound: SoundStatus) -> str:
    """What is heard, and what went wrong with it."""
    parts = [f"hearing {clean(sound.heard) or 'nothing'}" + (" (muted)" if sound.muted else "")]
    if sound.delay_s is not None:
        parts.append(f"{1e3 * sound.delay_s:.0f} ms after the receiver")
    for count, words in ((sound.underruns, "underrun(s)"), (sound.skips, "skip(s)"), (sound.losses, "output loss(es)")):
        if count:
            parts.append(f"{count} {words}")
    if sound.trouble is not None:
        parts.append(f"NO SOUND: {clean(sound.trouble)}")
    return ", ".join(parts)


def channel_line(channel: ChannelStatus) -> str:
    """One channel's result on one line."""
    figures = channel.overall
    parts = [
        f"{clean(channel.name)}: {frequency(channel.frequency_hz)} {channel.emission}",
        f"{channel.detector} ({clean(channel.detector_reason)})",
        LOCK_WORDS.get(channel.lock, channel.lock),
        f"SNR {with_uncertainty(figures.snr_db, 'dB')}",
    ]
    if figures.depth_percent is not None:
        parts.append(f"depth {with_uncertainty(figures.depth_percent, '%')}")
    if figures.carrier_offset_hz is not None:
        parts.append(f"offset {with_uncertainty(figures.carrier_offset_hz, 'Hz')}")
    parts.append(f"level {with_uncertainty(figures.level_dbfs, 'dBFS')}")
    return ", ".join(parts)
