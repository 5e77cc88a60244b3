"""Which way of showing suits where the output goes."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Protocol

from rxchain.chain.status import ReceiverStatus
from rxchain.dashboard.operations import Operations
from rxchain.dashboard.plain import Nothing, PlainLines

_LEAST_WIDTH, _LEAST_HEIGHT = 40, 8


class Display(Protocol):
    """Shows a run."""

    wants_status: bool

    def show(self, status: ReceiverStatus) -> None:
        """Takes a snapshot; never waits."""
        ...

    def running(self, stop: Callable[[], None]) -> AbstractContextManager[None]:
        """Shows while the body runs; ``stop`` asks the run to end."""
        ...


def make_display(quiet: bool, operations: Operations | None = None) -> Display:
    """The dashboard on a terminal, plain lines in a pipe or on a terminal that cannot be drawn on, nothing if quiet."""
    if quiet:
        return Nothing()
    if not sys.stdout.isatty():
        return PlainLines(sys.stdout, time.monotonic)
    from rich.console import Console

    console = Console()
    width, height = console.size
    if console.is_dumb_terminal or width < _LEAST_WIDTH or height < _LEAST_HEIGHT:
        return PlainLines(sys.stdout, time.monotonic)
    from rxchain.dashboard.screen import Dashboard

    return Dashboard(console, operations)
