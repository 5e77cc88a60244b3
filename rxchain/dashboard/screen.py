"""The live dashboard: its own thread draws the latest snapshot a few times a second and listens to the keys."""

from __future__ import annotations

import os
import select
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

from rich.console import Console
from rich.live import Live

from rxchain.chain.status import ReceiverStatus
from rxchain.dashboard.bars import ASCII, BLOCKS, Glyphs
from rxchain.dashboard.keys import Keyboard
from rxchain.dashboard.layout import picture
from rxchain.dashboard.operations import NoOperations, Operations

_REFRESH_S = 0.2


class Dashboard:
    """Shows snapshots on a terminal's alternate screen; the terminal is restored whatever ends the run.

    show(status) : keeps the latest snapshot, to be drawn at the next refresh; never waits.
    """

    wants_status = True

    def __init__(self, console: Console, operations: Operations | None = None) -> None:
        self._console = console
        self._keyboard = Keyboard(operations or NoOperations())
        self._glyphs: Glyphs = BLOCKS if "utf" in console.encoding.lower() else ASCII
        self._status: ReceiverStatus | None = None
        self._ended = threading.Event()
        self._failure: Exception | None = None

    def show(self, status: ReceiverStatus) -> None:
        """Takes the latest snapshot."""
        if not self._keyboard.is_frozen:
            self._status = status

    @contextmanager
    def running(self, stop: Callable[[], None]) -> Iterator[None]:
        """Draws while the body runs; ``stop`` is called when the user asks to end."""
        with (
            _keys_at_once(),
            _quiet_stderr(),
            Live(console=self._console, screen=True, auto_refresh=False, transient=True) as live,
            _suspendable(live),
        ):
            thread = threading.Thread(target=self._draw, args=(live, stop), name="dashboard", daemon=True)
            thread.start()
            try:
                yield
            finally:
                self._ended.set()
                thread.join(timeout=2.0)
        if self._failure is not None:
            print(f"the dashboard stopped: {self._failure!r}; reception went on", file=sys.stderr)

    def _draw(self, live: Live, stop: Callable[[], None]) -> None:
        try:
            self._draw_until_ended(live, stop)
        except Exception as error:
            self._failure = error  # reception goes on without a picture; what happened is said at the end

    def _draw_until_ended(self, live: Live, stop: Callable[[], None]) -> None:
        while not self._ended.is_set():
            status = self._status
            if status is not None:
                width, height = self._console.size
                live.update(picture(status, self._keyboard, width, height, self._glyphs), refresh=True)
            self._keyboard.obey(self._keys(), stop, len(status.channels) if status else 1)

    def _keys(self) -> str:
        """What was typed within one refresh."""
        if not sys.stdin.isatty():
            self._ended.wait(_REFRESH_S)
            return ""
        ready, _, _ = select.select([sys.stdin], [], [], _REFRESH_S)
        return os.read(sys.stdin.fileno(), 64).decode(errors="ignore") if ready else ""


@contextmanager
def _keys_at_once() -> Iterator[None]:
    """Keys come one by one and unseen, and the terminal is put back afterwards."""
    if not sys.stdin.isatty():
        yield
        return
    import termios
    import tty

    before = termios.tcgetattr(sys.stdin)
    tty.setcbreak(sys.stdin)
    try:
        yield
    finally:
        termios.tcsetattr(sys.stdin, termios.TCSADRAIN, before)


@contextmanager
def _quiet_stderr() -> Iterator[None]:
    """What C libraries write to the terminal would tear the picture: it is kept and printed afterwards."""
    import tempfile

    with tempfile.TemporaryFile() as kept:
        sys.stderr.flush()
        before = os.dup(2)
        os.dup2(kept.fileno(), 2)
        try:
            yield
        finally:
            os.dup2(before, 2)
            os.close(before)
            kept.seek(0)
            text = kept.read(10_000).decode(errors="replace")
            if text:
                sys.stderr.write(text)


@contextmanager
def _suspendable(live: Live) -> Iterator[None]:
    """Ctrl-Z leaves the alternate screen, and coming back enters it again."""
    if threading.current_thread() is not threading.main_thread() or not hasattr(signal, "SIGTSTP"):
        yield
        return

    def suspend(number: int, _: FrameType | None) -> None:
        live.stop()
        signal.signal(number, signal.SIG_DFL)
        os.kill(os.getpid(), number)
        signal.signal(number, suspend)
        live.start()

    before: Any = signal.signal(signal.SIGTSTP, suspend)
    try:
        yield
    finally:
        signal.signal(signal.SIGTSTP, before)
