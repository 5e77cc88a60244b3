"""Listening while receiving: a thread that keeps the speaker fed, whatever becomes of the speaker."""

from __future__ import annotations

import contextlib
import os
import threading
from collections.abc import Callable
from typing import Protocol

import numpy as np

from rxchain.chain.receiver import ChannelAudio, Receiver, messages_of
from rxchain.chain.status import SoundStatus
from rxchain.errors import RequestError, SinkError
from rxchain.sinks.hearing import Hearing
from rxchain.sinks.playback import START_VOLUME_DB, Playback, Voice
from rxchain.streams import FloatBlock

_BLOCK_S = 0.005
_FIRST_WAIT_S, _LONGEST_WAIT_S = 0.5, 4.0
_STUCK_S = 2.0
_NICE = -10
# An output that takes samples faster than any real one would is held to this pace.
_FASTEST, _AHEAD_S = 1.005, 0.2


class Output(Protocol):
    """What is played on; see :class:`rxchain.sinks.sound_output.SoundOutput`."""

    name: str
    rate_hz: float
    latency_s: float

    def write(self, frames: FloatBlock) -> bool:
        """Plays what follows; True where the output had run dry."""
        ...

    def close(self) -> None:
        """Releases the output."""
        ...


class Listening:
    """Plays what is heard of a receiver's channels.

    reopen : opens the output, the first time and again after it was lost; raises where it is not there.
    clock : seconds, steadily rising.
    """

    def __init__(
        self,
        receiver: Receiver,
        hearing: Hearing,
        reopen: Callable[[], Output],
        clock: Callable[[], float],
        volume_db: float = START_VOLUME_DB,
    ) -> None:
        self._receiver, self._reopen, self._clock = receiver, reopen, clock
        self._output: Output | None = reopen()
        # What is still being identified, or is changed on the way, may come to have two messages.
        self._messages = [2 if not c.emission_given else len(messages_of(c)) for c in receiver.channels]
        self._voices = [Voice(receiver.audio_rate_hz(k), n) for k, n in enumerate(self._messages)]
        self._playback = Playback(self._voices, self._output.rate_hz, hearing)
        self._playback.volume_db = volume_db
        self._closing = threading.Event()
        self._lost: str | None = None
        self._losses = self._dry = 0
        self._delay_s: float | None = None
        self._largest_s = 0.0
        self._alive_s = clock()
        self._failure: str | None = None
        self._thread = threading.Thread(target=self._play, name="sound", daemon=True)
        self._thread.start()

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio of one channel; never waits for the speaker."""
        messages = self._messages[audio.place]
        heard = audio.audio
        if len(heard) != messages:
            heard = np.repeat(heard.mean(axis=0, keepdims=True), messages, axis=0)
        self._playback.write(audio.place, heard)

    def hear(self, hearing: Hearing) -> None:
        """Hears other channels from now on; from any thread."""
        self._playback.hear(hearing)

    def set_volume_db(self, volume_db: float) -> None:
        """Sets the volume, at most 0 dB; from any thread."""
        self._playback.volume_db = min(0.0, volume_db)

    def set_muted(self, muted: bool) -> None:
        """Silences what is heard, or lets it be heard again; from any thread."""
        self._playback.muted = muted

    def status(self) -> SoundStatus:
        """How it stands with the sound."""
        playback = self._playback
        trouble = self._failure or self._lost
        if trouble is None and self._clock() - self._alive_s > _STUCK_S:
            trouble = "the output takes nothing any more"
        names = [channel.name for channel in self._receiver.channels]
        return SoundStatus(
            output=self._output.name if self._output else "",
            heard=playback.hearing.in_words(names),
            places=playback.hearing.places,
            volume_db=playback.volume_db,
            muted=playback.muted,
            delay_s=self._delay_s if trouble is None else None,
            underruns=playback.clock.underruns + self._dry,
            skips=playback.clock.skips,
            losses=self._losses,
            speed=playback.clock.speed,
            trouble=trouble,
        )

    def close(self) -> None:
        """Plays to the end what is there, and stops."""
        self._playback.clock.ending = True
        self._closing.set()
        self._thread.join(timeout=_STUCK_S)
        if self._thread.is_alive():
            from rxchain.sinks.sound_output import abandon

            abandon()

    def _play(self) -> None:
        with contextlib.suppress(OSError, AttributeError):  # where the system lets us: it is little work, and urgent
            os.setpriority(os.PRIO_PROCESS, threading.get_native_id(), _NICE)
        try:
            while not (self._closing.is_set() and self._output is None):
                if self._output is None:
                    self._recover()
                elif self._feed(self._output):
                    return
        except Exception as error:
            self._failure = f"the sound stopped: {error!r}"  # reception goes on; the status says it

    def _feed(self, output: Output) -> bool:
        """Writes until all is played (True) or the output is lost."""
        playback = self._playback
        n = round(_BLOCK_S * output.rate_hz)
        ahead_s, last_s, last_seen_s = 0.0, self._clock(), 0.0
        silent_s = 0.0
        try:
            while silent_s <= output.latency_s:
                if self._closing.is_set() and not playback.clock.is_playing:
                    silent_s += _BLOCK_S  # what is in the output's own buffer has yet to be heard
                frames = playback.render(n)
                if output.write(frames):
                    self._dry += 1
                    playback.clock.hole()
                now_s = self._alive_s = self._clock()
                ahead_s = max(0.0, ahead_s - _FASTEST * (now_s - last_s)) + _BLOCK_S
                last_s = now_s
                if ahead_s > _AHEAD_S + output.latency_s:
                    self._closing.wait(ahead_s - _AHEAD_S - output.latency_s)
                last_seen_s = self._watch_delay(output, now_s, last_seen_s)
            output.close()
            return True
        except SinkError as error:
            self._lost = str(error)
            self._losses += 1
            output.close()
            self._output = None
            return False

    def _watch_delay(self, output: Output, now_s: float, since_s: float) -> float:
        """Largest time from a sample's arrival to its being heard, over each second."""
        clock = self._playback.clock
        if clock.is_playing:
            ahead_s = self._receiver.elapsed_s - clock.position_s
            self._largest_s = max(self._largest_s, ahead_s + self._playback.held_back_s + output.latency_s)
        if now_s - since_s < 1.0:
            return since_s
        self._delay_s, self._largest_s = self._largest_s or None, 0.0
        return now_s

    def _recover(self) -> None:
        """Tries to open the output again, at growing intervals."""
        wait_s = _FIRST_WAIT_S
        while not self._closing.wait(wait_s):
            self._alive_s = self._clock()
            try:
                output = self._reopen()
            except (SinkError, RequestError) as error:
                self._lost = str(error)
                wait_s = min(2 * wait_s, _LONGEST_WAIT_S)
                continue
            self._adopt(output)
            return

    def _adopt(self, output: Output) -> None:
        before = self._playback
        if output.rate_hz != before.rate_hz:
            self._dry += before.clock.underruns
            self._playback = Playback(self._voices, output.rate_hz, before.hearing)
            self._playback.volume_db, self._playback.muted = before.volume_db, before.muted
        else:
            before.clock.restart()
        self._output, self._lost = output, None
