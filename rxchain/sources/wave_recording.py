"""Two-channel sound files as I/Q: WAV, RF64 and FLAC; left is I, right is Q.

Some receivers write a WAV whose samples lie in many ``data`` chunks with a time chunk before each; a reader that takes
the first for the whole would return a fraction of a second and say nothing. Such a file is read whole, chunk by chunk.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from rxchain.errors import SettingError, SourceError, SourceLost
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.raw_recording import file_size
from rxchain.sources.sample_file import Stretch, block_length, read_blocks
from rxchain.sources.sample_formats import CI16, LARGEST_SAMPLE
from rxchain.streams import Block

_RAIL = 1.0 - 2.0**-15  # highest value of a 16-bit converter


class WaveRecording:
    """Samples of a two-channel sound file; ``centre_hz`` has to be given, such a file does not tell it.

    rate_hz : overrides the header's whole number of samples a second where the true rate is known.
    """

    def __init__(
        self, path: Path, rate_hz: float | None, centre_hz: float | None, block_samples: int | None = None
    ) -> None:
        import soundfile

        if centre_hz is None:
            raise SettingError("centre", "(none)", "a sound file does not tell its centre", "add --centre FREQUENCY")
        self._path = path
        file_size(path)
        chunks = _data_chunks(path)
        if len(chunks) > 1:
            header_rate, n_samples = _many_chunks_format(path, chunks)
            self._stretches = _stretches(chunks)
        else:
            try:
                header = soundfile.info(path)
            except (soundfile.LibsndfileError, OSError) as error:
                raise SourceError(f"{path}: not a sound file that can be read: {error}") from error
            if header.channels != 2:
                raise SourceError(f"{path}: has {header.channels} channel(s); I/Q takes two, I left and Q right")
            header_rate, n_samples = header.samplerate, header.frames
            self._stretches = []
        if n_samples == 0:
            raise SourceError(f"{path}: holds no samples")
        rate = rate_hz or float(header_rate)
        self._block_samples = block_samples or block_length(rate)
        self._info = SourceInfo("recording", path.name, rate, centre_hz, None, n_samples)

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample."""
        return self._info

    def blocks(self) -> Iterator[Block]:
        """All samples in order; raises :class:`SourceLost` where the file breaks off before its stated end."""
        if self._stretches:
            yield from read_blocks(self._path, CI16, self._stretches, self._block_samples)
            return
        import soundfile

        index = 0
        try:
            with soundfile.SoundFile(self._path) as file:
                is_float = file.subtype in ("FLOAT", "DOUBLE")
                while len(frames := file.read(self._block_samples, dtype="float32", always_2d=True)):
                    iq, overloaded = _decoded(frames, is_float)
                    yield Block(iq, index, 0, overloaded)
                    index += len(iq)
        except (soundfile.LibsndfileError, OSError) as error:
            raise SourceLost(f"{self._path}: cannot be read on after {index} samples: {error}") from error
        if index < (self._info.n_samples or 0):
            raise SourceLost(f"{self._path}: ends {(self._info.n_samples or 0) - index} samples early")

    def close(self) -> None:
        """Nothing stays open between blocks' readers."""


def _decoded(frames: np.ndarray, is_float: bool) -> tuple[np.ndarray, int]:
    if is_float:
        over = ~(np.abs(frames) <= LARGEST_SAMPLE)
        frames = np.where(over, np.float32(0), frames)
    else:
        over = (frames <= -1.0) | (frames >= _RAIL)
    return np.ascontiguousarray(frames).view(np.complex64)[:, 0], int(np.count_nonzero(over.any(axis=1)))


def _data_chunks(path: Path) -> list[tuple[int, int]]:
    """Byte offset and length of each ``data`` chunk of a plain RIFF file; empty for anything else."""
    chunks: list[tuple[int, int]] = []
    with path.open("rb") as file:
        head = file.read(12)
        if head[:4] != b"RIFF" or head[8:] != b"WAVE":
            return []
        size = path.stat().st_size
        position = 12
        while position + 8 <= size:
            file.seek(position)
            name, length = struct.unpack("<4sI", file.read(8))
            if name == b"data":
                chunks.append((position + 8, min(length, size - position - 8)))
            position += 8 + length + (length & 1)
    return chunks


def _many_chunks_format(path: Path, chunks: list[tuple[int, int]]) -> tuple[int, int]:
    """Rate and number of samples of a file with many data chunks; only 16-bit two-channel ones are known to exist."""
    with path.open("rb") as file:
        head = file.read(chunks[0][0])
    place = head.find(b"fmt ")
    kind, channels, rate, _, _, bits = struct.unpack_from("<HHIIHH", head, place + 8) if place > 0 else (0,) * 6
    if (kind, channels, bits) != (1, 2, 16):
        raise SourceError(f"{path}: many data chunks, and not 16-bit I/Q in them; this is not served")
    return rate, sum(length // 4 for _, length in chunks)


def _stretches(chunks: list[tuple[int, int]]) -> list[Stretch]:
    stretches: list[Stretch] = []
    index = 0
    for offset, length in chunks:
        stretches.append(Stretch(offset, length // 4, index))
        index += length // 4
    return stretches
