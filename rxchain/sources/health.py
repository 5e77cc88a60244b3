"""How it stands with a source: what went wrong so far, and what is wrong now."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, runtime_checkable


@dataclass(frozen=True, slots=True)
class SourceHealth:
    """Separate counts of separate faults.

    trouble : what is wrong at this moment, in words; None where nothing is. late : blocks or buffers that came late.
    short : buffers that came shorter than asked for. reopened : how often a receiver was lost and found again.
    gain_db : the receiver's gain where the chain sets it, None elsewhere.
    """

    trouble: str | None = None
    late: int = 0
    short: int = 0
    reopened: int = 0
    gain_db: float | None = None


@runtime_checkable
class Watched(Protocol):
    """A source that says how it is: one with a clock. A file read as fast as it goes has nothing to say."""

    @property
    def health(self) -> SourceHealth:
        """What went wrong so far, and what is wrong now."""
        ...
