"""A recording that takes its time: each block comes no earlier than its last sample would have."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from rxchain.sources.health import SourceHealth
from rxchain.sources.protocol import Source, SourceInfo
from rxchain.streams import Block

_LATE_S = 0.1


class Paced:
    """The same blocks as ``source``, at the pace of its sample rate.

    clock : seconds, steadily rising. wait : waits that many seconds, or less when asked to stop.
    late_blocks : blocks that were asked for more than 100 ms after their time.
    """

    def __init__(self, source: Source, clock: Callable[[], float], wait: Callable[[float], object]) -> None:
        self._source, self._clock, self._wait = source, clock, wait
        self.late_blocks = 0

    @property
    def health(self) -> SourceHealth:
        """What went wrong so far."""
        return SourceHealth(late=self.late_blocks)

    @property
    def info(self) -> SourceInfo:
        """The source's own."""
        return self._source.info

    def blocks(self) -> Iterator[Block]:
        """The source's blocks, each when its time has come."""
        rate_hz = self._source.info.sample_rate_hz
        started_s: float | None = None
        for block in self._source.blocks():
            if started_s is None:
                started_s = self._clock() - block.index / rate_hz
            due_s = started_s + (block.index + len(block.iq)) / rate_hz
            ahead_s = due_s - self._clock()
            if ahead_s > 0:
                self._wait(ahead_s)
            elif ahead_s < -_LATE_S:
                self.late_blocks += 1
            yield block

    def close(self) -> None:
        """Closes the source."""
        self._source.close()
