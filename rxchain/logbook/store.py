"""The entries of a logbook in an SQLite file: one writer, any number of readers while it writes, nothing ever rewritten.

An entry is a number, a kind and a body (JSON); its digest chains it to all before. Entries are ordered by their numbers
alone: a clock that is set back reorders nothing. A committed entry survives a power cut (``synchronous=FULL``).
"""

from __future__ import annotations

import fcntl
import json
import os
import sqlite3
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rxchain.errors import RequestError
from rxchain.logbook.links import FIRST, canonical, digest

DATABASE, LOCK, CLIPS, UNFINISHED = "logbook.sqlite", "lock", "clips", "unfinished"
_SCHEMA = """
CREATE TABLE IF NOT EXISTS entry (
    number INTEGER PRIMARY KEY, kind TEXT NOT NULL, body TEXT NOT NULL, digest TEXT NOT NULL
) STRICT;
CREATE INDEX IF NOT EXISTS entry_kind ON entry (kind, number);
CREATE TABLE IF NOT EXISTS unfinished (key TEXT PRIMARY KEY, body TEXT NOT NULL) STRICT;
"""


@dataclass(frozen=True, slots=True)
class Entry:
    """One line of the logbook. kind : ``run``, ``transmission``, ``event``, ``mark`` or ``removal``."""

    number: int
    kind: str
    body: dict[str, Any]
    digest: str
    text: str


class LogStore:
    """The writer's hold on a logbook; makes the folder, private to its owner, if it is not there.

    Raises :class:`RequestError` where another run writes it or the folder or database cannot be used.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        try:
            folder.mkdir(parents=True, exist_ok=True, mode=0o700)
            for name in (CLIPS, UNFINISHED):
                (folder / name).mkdir(exist_ok=True, mode=0o700)
            self._lock = os.open(folder / LOCK, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        except OSError as error:
            raise RequestError(f"log={folder}: not a folder that can be written: {error.strerror or error}") from error
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            os.close(self._lock)
            raise RequestError(
                f"log={folder}: another run is writing this logbook; give each station its own"
            ) from None
        try:
            self._database = _connect(folder / DATABASE)
            self._database.executescript(_SCHEMA)
            last = self._database.execute("SELECT number, digest FROM entry ORDER BY number DESC LIMIT 1").fetchone()
        except sqlite3.Error as error:
            os.close(self._lock)
            raise RequestError(
                f"log={folder}: {DATABASE} cannot be used ({error}); move it away to begin a new one"
            ) from error
        self.number: int = last[0] if last else 0
        self.digest: str = last[1] if last else FIRST

    def append(self, kind: str, body: dict[str, Any], finished: str | None = None) -> Entry:
        """Adds an entry; ``finished`` : key of the unfinished clip that it closes. Raises :class:`OSError` where the disk
        takes no more; nothing has changed then.
        """
        text = canonical(body)
        number = self.number + 1
        link = digest(self.digest, number, kind, text)
        try:
            with self._database:
                self._database.execute("INSERT INTO entry VALUES (?, ?, ?, ?)", (number, kind, text, link))
                if finished is not None:
                    self._database.execute("DELETE FROM unfinished WHERE key = ?", (finished,))
        except sqlite3.Error as error:
            raise OSError(f"logbook: {error}") from error
        self.number, self.digest = number, link
        return Entry(number, kind, json.loads(text), link, text)

    def begin(self, key: str, body: dict[str, Any]) -> None:
        """Notes that a clip has been begun, so that a run after a power cut can close it."""
        try:
            with self._database:
                self._database.execute("INSERT OR REPLACE INTO unfinished VALUES (?, ?)", (key, canonical(body)))
        except sqlite3.Error as error:
            raise OSError(f"logbook: {error}") from error

    def finish(self, key: str) -> None:
        """Forgets a clip that was begun and left nothing."""
        try:
            with self._database:
                self._database.execute("DELETE FROM unfinished WHERE key = ?", (key,))
        except sqlite3.Error as error:
            raise OSError(f"logbook: {error}") from error

    def unfinished(self) -> list[tuple[str, dict[str, Any]]]:
        """Clips that a run left open."""
        rows = self._database.execute("SELECT key, body FROM unfinished ORDER BY key").fetchall()
        return [(key, json.loads(body)) for key, body in rows]

    def close(self) -> None:
        """Lets go of the logbook."""
        self._database.close()
        os.close(self._lock)


def read_entries(folder: Path, kind: str | None = None) -> Iterator[Entry]:
    """The entries in order, as they are stored; a writer may be at work. Raises :class:`RequestError`."""
    path = folder / DATABASE
    if not path.is_file():
        raise RequestError(f"{folder}: no logbook here: there is no {DATABASE}")
    try:
        database = sqlite3.connect(f"file:{path}?mode=ro", uri=True)
        try:
            wanted = "WHERE kind = ? " if kind else ""
            rows = database.execute(
                f"SELECT number, kind, body, digest FROM entry {wanted}ORDER BY number", (kind,) if kind else ()
            )
            for number, its_kind, text, link in rows:
                yield Entry(number, its_kind, _loaded(text), link, text)
        finally:
            database.close()
    except sqlite3.Error as error:
        raise RequestError(f"{path}: not readable as a logbook: {error}") from error


def _connect(path: Path) -> sqlite3.Connection:
    os.close(os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600))
    database = sqlite3.connect(path)
    database.execute("PRAGMA journal_mode=WAL")
    database.execute("PRAGMA synchronous=FULL")
    return database


def _loaded(text: Any) -> dict[str, Any]:
    """The body, empty where it is no longer JSON: who verifies will see."""
    try:
        body = json.loads(text)
    except (ValueError, TypeError):
        return {}
    return body if isinstance(body, dict) else {}
