"""One stream of audio for several takers."""

from __future__ import annotations

from collections.abc import Sequence

from rxchain.chain.receiver import ChannelAudio
from rxchain.chain.runner import AudioSink


class Several:
    """Hands every channel's audio to each sink in turn."""

    def __init__(self, sinks: Sequence[AudioSink]) -> None:
        self._sinks = tuple(sinks)

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio of one channel."""
        for sink in self._sinks:
            sink.write(audio)
