"""The errors a user can meet, each with the exit status it leads to.

::

    ReceiverError
    ├── RequestError          2  the request cannot be served; nothing was started
    │   ├── SettingError         a key or value (also a ValueError)
    │   └── SourceError          a file or device that cannot be used as a source
    └── FaultError            3  stopped by a fault after the start; what was received is kept
        ├── SourceLost
        └── SinkError

A gap in the samples is not an error but an event: see :class:`rxchain.streams.Block`.
"""

from __future__ import annotations


class ReceiverError(Exception):
    """Anything the receiver reports to its user as one line."""

    exit_status = 3


class RequestError(ReceiverError):
    """A request that cannot be served: says what, where, and what would do."""

    exit_status = 2


class SettingError(RequestError, ValueError):
    """A key whose value breaks a rule.

    >>> str(SettingError("audio", "100-9000Hz", "the upper edge must be at most 5160 Hz", "lower the edge"))
    'audio=100-9000Hz: the upper edge must be at most 5160 Hz; lower the edge'
    """

    def __init__(self, name: str, value: object, rule: str, way_out: str = "") -> None:
        super().__init__(f"{name}={value}: {rule}" + (f"; {way_out}" if way_out else ""))
        self.name = name
        self.value = value


class SourceError(RequestError):
    """A file or device that cannot serve as a source."""


class FaultError(ReceiverError):
    """A fault after reception had started; what was received until then is kept."""

    exit_status = 3


class SourceLost(FaultError):
    """The source broke off: unreadable data in the middle, or a device that went away."""


class SinkError(FaultError):
    """A file or device that takes no more: disk full, output gone."""
