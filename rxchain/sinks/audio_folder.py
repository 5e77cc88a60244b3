"""All channels' audio files of a run in one folder, and the summary beside them."""

from __future__ import annotations

from pathlib import Path

from rxchain.chain.receiver import ChannelAudio, Receiver, messages_of
from rxchain.errors import RequestError
from rxchain.sinks.audio_file import AudioFile
from rxchain.sinks.summary_file import summary_of, write_summary


class AudioFolder:
    """Writes ``NAME.wav`` for each channel, and ``summary.json`` when it is closed.

    The folder is made if it is not there. Raises :class:`RequestError` where it cannot be used.
    """

    def __init__(self, folder: Path, receiver: Receiver) -> None:
        self.folder = folder
        self._receiver = receiver
        try:
            folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise RequestError(f"out={folder}: not a folder that can be made: {error.strerror or error}") from error
        info = receiver.info
        seconds = None if info.n_samples is None else info.n_samples / info.sample_rate_hz
        self._files: list[AudioFile] = []
        for place, channel in enumerate(receiver.channels):
            rate_hz = receiver.audio_rate_hz(place)
            expected = None if seconds is None else round(seconds * rate_hz)
            path = folder / f"{channel.name}.wav"
            self._files.append(AudioFile(path, rate_hz, len(messages_of(channel)), expected))

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio of one channel."""
        self._files[audio.place].write(audio.audio)

    def close(self) -> None:
        """Finishes the files and writes the summary of the whole run."""
        written = {place: (file, file.close()) for place, file in enumerate(self._files)}
        write_summary(self.folder / "summary.json", summary_of(self._receiver, written))


class NoAudio:
    """Keeps nothing: a run for its figures alone."""

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio and forgets it."""

    def close(self) -> None:
        """Nothing to finish."""
