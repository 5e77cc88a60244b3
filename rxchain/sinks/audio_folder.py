"""All channels' audio files of a run in one folder, and the summary beside them."""

from __future__ import annotations

from functools import partial
from pathlib import Path

from rxchain.chain.receiver import ChannelAudio, Receiver, messages_of
from rxchain.errors import RequestError
from rxchain.sinks.audio_file import AudioFile
from rxchain.sinks.audio_track import AudioTrack
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
        self._files: dict[int, AudioFile] = {}
        self._tracks: dict[int, AudioTrack] = {}
        for place, channel in enumerate(receiver.channels):
            rate_hz = receiver.audio_rate_hz(place)
            expected = None if seconds is None else round(seconds * rate_hz)
            if channel.emission_given:
                path = folder / f"{channel.name}.wav"
                self._files[place] = AudioFile(path, rate_hz, len(messages_of(channel)), expected)
            else:
                open_file = partial(_open_file, rate_hz=rate_hz, expected=expected)
                self._tracks[place] = AudioTrack(folder, channel.name, rate_hz, open_file)

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio of one channel."""
        (self._tracks.get(audio.place) or self._files[audio.place]).write(audio.audio)

    def close(self) -> None:
        """Finishes the files and writes the summary of the whole run."""
        files = {place: [file] for place, file in self._files.items()}
        files |= {place: track.finish() for place, track in self._tracks.items()}
        written = {place: [(file, file.close()) for file in some] for place, some in sorted(files.items())}
        write_summary(self.folder / "summary.json", summary_of(self._receiver, written))


def _open_file(path: Path, messages: int, rate_hz: float, expected: int | None) -> AudioFile:
    return AudioFile(path, rate_hz, messages, expected)


class NoAudio:
    """Keeps nothing: a run for its figures alone."""

    def write(self, audio: ChannelAudio) -> None:
        """Takes new audio and forgets it."""

    def close(self) -> None:
        """Nothing to finish."""
