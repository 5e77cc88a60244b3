"""Blocks from stretches of a file of interleaved samples, a piece at a time."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from rxchain.errors import SourceLost
from rxchain.sources.sample_formats import SampleFormat
from rxchain.streams import Block


@dataclass(frozen=True, slots=True)
class Stretch:
    """Consecutive samples in a file: where they start in it, how many, and the index of the first on the air."""

    byte_offset: int
    n_samples: int
    index: int


def block_length(sample_rate_hz: float) -> int:
    """Samples in a block of about 50 ms."""
    return max(1024, round(0.05 * sample_rate_hz))


def read_blocks(
    path: Path, sample_format: SampleFormat, stretches: Sequence[Stretch], block_samples: int
) -> Iterator[Block]:
    """The samples of the stretches in blocks; what is missing between two stretches is reported as lost.

    Raises :class:`SourceLost` where the file cannot be read on.
    """
    expected = stretches[0].index if stretches else 0
    try:
        with path.open("rb", buffering=0) as file:
            for stretch in stretches:
                lost = stretch.index - expected
                done = 0
                file.seek(stretch.byte_offset)
                while done < stretch.n_samples:
                    n = min(block_samples, stretch.n_samples - done)
                    data = file.read(n * sample_format.sample_bytes)
                    got = len(data) // sample_format.sample_bytes
                    if got == 0:
                        raise SourceLost(f"{path}: ends {stretch.n_samples - done} samples early")
                    components = np.frombuffer(data, sample_format.dtype, count=2 * got)
                    iq, overloaded = sample_format.decode(components)
                    yield Block(iq, stretch.index + done, lost, overloaded)
                    done += got
                    lost = 0
                expected = stretch.index + stretch.n_samples
    except OSError as error:
        raise SourceLost(f"{path}: cannot be read on: {error.strerror or error}") from error
