"""A raw file of interleaved samples; its name's suffix tells the format, rate and centre have to be given."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from rxchain.errors import SettingError, SourceError
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.sample_file import Stretch, block_length, read_blocks
from rxchain.sources.sample_formats import BY_SUFFIX
from rxchain.streams import Block


class RawRecording:
    """Samples of a ``.cu8``, ``.cs8``, ``.cs16`` or ``.cf32`` file, little endian."""

    def __init__(
        self, path: Path, rate_hz: float | None, centre_hz: float | None, block_samples: int | None = None
    ) -> None:
        for name, value in (("rate", rate_hz), ("centre", centre_hz)):
            if value is None:
                raise SettingError(name, "(none)", f"a raw file does not tell its {name}", f"add --{name} FREQUENCY")
        self._format = BY_SUFFIX[path.suffix.lower()]
        self._path = path
        size = file_size(path)
        n_samples = size // self._format.sample_bytes
        if n_samples == 0:
            raise SourceError(f"{path}: holds no samples")
        rate = float(rate_hz or 0.0)
        self._stretches = [Stretch(0, n_samples, 0)]
        self._block_samples = block_samples or block_length(rate)
        self._info = SourceInfo("recording", path.name, rate, float(centre_hz or 0.0), None, n_samples)

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample."""
        return self._info

    def blocks(self) -> Iterator[Block]:
        """All samples in order."""
        return read_blocks(self._path, self._format, self._stretches, self._block_samples)

    def close(self) -> None:
        """Nothing stays open between blocks' readers."""


def file_size(path: Path) -> int:
    """Bytes in a file; raises :class:`SourceError` where it is none that can be read."""
    try:
        if not path.is_file():
            raise SourceError(f"{path}: no such file" if not path.exists() else f"{path}: not a file")
        with path.open("rb"):
            return path.stat().st_size
    except OSError as error:
        raise SourceError(f"{path}: cannot be read: {error.strerror or error}") from error
