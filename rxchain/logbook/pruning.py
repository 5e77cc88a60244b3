"""Makes room: removes the files of old transmissions, never an entry, so that the chain stays whole.

What was marked with a word is kept. Of the rest the oldest day goes first, and within a day the weakest signals.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rxchain.logbook.store import Entry, LogStore, read_entries


@dataclass(frozen=True, slots=True)
class Pruned:
    """What was removed, and what is left."""

    transmissions: int
    files: int
    bytes: int
    bytes_left: int


def prune(store: LogStore, now: dt.datetime, budget_bytes: int | None, oldest_days: float | None) -> Pruned:
    """Removes files until the rest fits the budget and nothing is older than allowed; None leaves a rule out."""
    folder = store.folder
    kept = _kept(folder)
    left = sum(_size(entry) for entry, _ in kept)
    limit = None if oldest_days is None else (now - dt.timedelta(days=oldest_days)).isoformat()
    count = files = freed = 0
    for entry, is_marked in sorted(kept, key=lambda one: _rank(one[0])):
        is_old = limit is not None and (entry.body.get("start") or "") < limit
        is_over = budget_bytes is not None and left > budget_bytes
        if is_marked or not (is_old or is_over):
            continue
        paths = [str(file["path"]) for file in entry.body["files"]]
        # The entry comes first: a break between the two leaves files that the next run removes.
        store.append("removal", {"of": entry.number, "time": now.isoformat(), "paths": paths})
        remove_files(folder, paths)
        count, files, freed, left = count + 1, files + len(paths), freed + _size(entry), left - _size(entry)
    return Pruned(count, files, freed, left)


def remove_files(folder: Path, paths: list[str]) -> None:
    """Removes files of a logbook; such as lie outside its folder are left alone."""
    for path in paths:
        full = (folder / path).resolve()
        if full.is_relative_to(folder.resolve()):
            full.unlink(missing_ok=True)


def _kept(folder: Path) -> list[tuple[Entry, bool]]:
    """Transmissions whose files are still there, and whether each is marked."""
    transmissions: dict[int, Entry] = {}
    marked: set[int] = set()
    for entry in read_entries(folder):
        if entry.kind == "transmission" and entry.body.get("files"):
            transmissions[entry.number] = entry
        elif entry.kind == "removal":
            transmissions.pop(int(entry.body.get("of", 0)), None)
        elif entry.kind == "mark" and "of" in entry.body:
            marked.add(int(entry.body["of"]))
    return [(entry, number in marked) for number, entry in transmissions.items()]


def _size(entry: Entry) -> int:
    return sum(int(file.get("bytes", 0)) for file in entry.body["files"])


def _rank(entry: Entry) -> tuple[Any, ...]:
    snr = (entry.body.get("measured") or {}).get("snr_db")
    return (entry.body.get("start") or "")[:10], snr["value"] if snr else -999.0, entry.number
