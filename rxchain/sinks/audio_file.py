"""A channel's audio as a sound file: WAV with 32-bit floating-point samples, so that nothing is lost or clipped."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np

from rxchain.errors import SinkError
from rxchain.streams import FloatBlock

# A RIFF file counts its bytes in 32 bits; above this length the 64-bit form is written.
_LARGEST_RIFF_BYTES = 4_000_000_000
_ADD_PEAK_CHUNK = 0x1050  # libsndfile's command of this name


class AudioFile:
    """Writes one channel's audio; the file is readable after a crash up to the last write.

    write(audio) : float32, (messages, n), full scale 1.0.
    """

    def __init__(self, path: Path, rate_hz: float, n_messages: int, expected_samples: int | None) -> None:
        import soundfile

        self.path = path
        self.rate_hz = rate_hz
        self.n_messages = n_messages
        self.samples = 0
        self._failures = (soundfile.LibsndfileError, OSError)
        large = expected_samples is None or expected_samples * n_messages * 4 > _LARGEST_RIFF_BYTES
        try:
            self._file = soundfile.SoundFile(
                path, "w", int(rate_hz), n_messages, subtype="FLOAT", format="RF64" if large else "WAV"
            )
            # The library would note the time of writing beside the peak; the same audio is to give the same file. Its
            # public interface has no switch for it.
            soundfile._snd.sf_command(self._file._file, _ADD_PEAK_CHUNK, soundfile._ffi.NULL, 0)
        except self._failures as error:
            raise SinkError(f"{path}: cannot be written: {error}") from error

    def write(self, audio: FloatBlock) -> None:
        """Appends audio; raises :class:`SinkError` where the disk takes no more."""
        try:
            self._file.write(np.ascontiguousarray(audio.T))
        except self._failures as error:
            raise SinkError(f"{self.path}: cannot be written: {error}") from error
        self.samples += audio.shape[1]

    def close(self) -> str:
        """Finishes the file; returns its SHA-256 in hexadecimal."""
        self._file.close()
        with self.path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
