"""What an operator asks of a running receiver, carried out between two blocks by the thread that owns it."""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable

from rxchain.errors import ReceiverError

Action = Callable[[], str]


class Commands:
    """A queue from any thread to the numeric one.

    post(action) : to be carried out before the next block; it returns what to tell the operator. said : the latest of that.
    """

    def __init__(self) -> None:
        self._waiting: deque[Action] = deque()
        self._lock = threading.Lock()
        self.said = ""

    def post(self, action: Action) -> None:
        """Asks for an action; from any thread, never waits."""
        with self._lock:
            self._waiting.append(action)

    def run_all(self) -> None:
        """Carries out what was asked for, in order; a request that cannot be served is told and changes nothing."""
        while self._waiting:
            with self._lock:
                action = self._waiting.popleft()
            try:
                self.said = action()
            except ReceiverError as error:
                self.said = str(error)
