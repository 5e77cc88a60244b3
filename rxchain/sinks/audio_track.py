"""The audio of a channel that is still being identified: how many messages it holds may change on the way."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np

from rxchain.sinks.audio_file import AudioFile
from rxchain.streams import FloatBlock

_UNDECIDED_S = 6.0  # the layout of the first file is that at this time; until then audio waits in memory


class AudioTrack:
    """Writes a channel's audio to one file, or, where its number of messages grows later, to one more.

    open_file(path, messages) : makes a file. folder, name : files are ``NAME.wav``, then ``NAME-2.wav`` and so on.
    write(audio) : float32, (messages, n); what has fewer messages than its file is heard on all of them.
    """

    def __init__(self, folder: Path, name: str, rate_hz: float, open_file: Callable[[Path, int], AudioFile]) -> None:
        self._folder, self._name, self._open_file = folder, name, open_file
        self._waiting: list[FloatBlock] = []
        self._left = round(_UNDECIDED_S * rate_hz)
        self.files: list[AudioFile] = []
        self._messages = 0

    def write(self, audio: FloatBlock) -> None:
        """Takes new audio; raises :class:`~rxchain.errors.SinkError` where the disk takes no more."""
        if self._left > 0:
            self._waiting.append(audio)
            self._left -= audio.shape[1]
            if self._left <= 0:
                self._decide()
            return
        if len(audio) > self._messages:
            self._next_file(len(audio))
        self._append(audio)

    def finish(self) -> list[AudioFile]:
        """Writes what still waits; returns the files, the latest last."""
        if not self.files:
            self._decide()
        return self.files

    def _decide(self) -> None:
        self._left = 0
        self._next_file(len(self._waiting[-1]) if self._waiting else 1)
        for audio in self._waiting:
            self._append(audio)
        self._waiting.clear()

    def _next_file(self, messages: int) -> None:
        number = f"-{len(self.files) + 1}" if self.files else ""
        self.files.append(self._open_file(self._folder / f"{self._name}{number}.wav", messages))
        self._messages = messages

    def _append(self, audio: FloatBlock) -> None:
        if len(audio) != self._messages:
            audio = np.repeat(audio.mean(axis=0, keepdims=True), self._messages, axis=0)
        self.files[-1].write(audio)
