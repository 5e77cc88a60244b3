"""What the keys of the dashboard ask for; whoever runs the receiver carries it out."""

from __future__ import annotations

from typing import Protocol

STEPS_HZ = (1.0, 10.0, 100.0, 1_000.0)


class Operations(Protocol):
    """The operator's wishes, from the dashboard's thread; none of them waits."""

    def tune(self, place: int, by_hz: float) -> None:
        """Retunes a channel."""
        ...

    def alter(self, place: int, what: str) -> None:
        """Takes the next ``emission``, ``detector``, ``sideband``, ``band``, ``squelch`` or ``notch``."""
        ...

    def hear(self, place: int) -> None:
        """Plays this channel alone."""
        ...

    def mute(self) -> None:
        """Silences the sound output, or lets it be heard again."""
        ...

    def louder(self, by_db: float) -> None:
        """Changes the volume."""
        ...

    def word(self, place: int, text: str) -> None:
        """Enters a word into the logbook, about a channel and this moment."""
        ...

    @property
    def said(self) -> str:
        """The answer to the latest wish."""
        ...


class NoOperations:
    """Nothing can be asked for."""

    said = ""

    def tune(self, place: int, by_hz: float) -> None:
        """Does nothing."""

    def alter(self, place: int, what: str) -> None:
        """Does nothing."""

    def hear(self, place: int) -> None:
        """Does nothing."""

    def mute(self) -> None:
        """Does nothing."""

    def louder(self, by_db: float) -> None:
        """Does nothing."""

    def word(self, place: int, text: str) -> None:
        """Does nothing."""
