"""What every source is: a description of its stream, and the blocks of it."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

from rxchain.streams import Block


@dataclass(frozen=True, slots=True)
class SourceInfo:
    """What is known of a source before its first sample.

    kind : ``recording`` or ``receiver``. name : how to call it on a screen, free of control characters.
    sample_rate_hz : complex samples a second, as exactly as the source states it. centre_hz : frequency at 0 Hz.
    start : UTC time of the first sample, None where unknown. n_samples : length on the air, gaps included; None where
    there is no end.
    """

    kind: str
    name: str
    sample_rate_hz: float
    centre_hz: float
    start: dt.datetime | None
    n_samples: int | None


class Source(Protocol):
    """A stream of wideband blocks. Opening happens in the constructor and raises :class:`SourceError`."""

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample."""
        ...

    def blocks(self) -> Iterator[Block]:
        """Blocks in order of time; raises :class:`SourceLost` when it breaks off, ends when the recording does."""
        ...

    def close(self) -> None:
        """Stops and releases everything; may be called twice, and from another thread."""
        ...
