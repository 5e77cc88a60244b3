"""Whether a logbook is as it was written: every entry's digest, every file's, and the files that nobody entered."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from rxchain.logbook.links import FIRST, digest, file_digest
from rxchain.logbook.store import CLIPS, Entry, read_entries


@dataclass(frozen=True, slots=True)
class Verdict:
    """faults : what is wrong, first first; empty where all is as written. entries, files : how many were checked.
    head : digest of the last entry.
    """

    faults: tuple[str, ...]
    entries: int
    files: int
    removed: int
    head: str

    @property
    def is_good(self) -> bool:
        """Whether nothing is wrong."""
        return not self.faults


def verify(folder: Path, check_files: bool = True) -> Verdict:
    """Checks a logbook from its first entry to its last; raises :class:`~rxchain.errors.RequestError` where it is none."""
    faults: list[str] = []
    before, count = FIRST, 0
    entered: dict[str, tuple[int, str]] = {}
    removed: set[str] = set()
    broken = False
    for entry in read_entries(folder):
        count += 1
        if entry.number != count and not broken:
            faults.append(f"entry {count}: missing; the next one is {entry.number}")
            broken = True
        if not broken and digest(before, entry.number, entry.kind, entry.text) != entry.digest:
            faults.append(f"entry {entry.number}: changed, or the one before it was replaced")
            broken = True
        before = entry.digest
        for path, its_digest in _files_of(entry):
            entered[path] = entry.number, its_digest
        if entry.kind == "removal":
            removed |= {str(path) for path in entry.body.get("paths", [])}
    if check_files:
        faults += _file_faults(folder, entered, removed)
    return Verdict(tuple(faults), count, len(entered), len(removed), before)


def _files_of(entry: Entry) -> Iterator[tuple[str, str]]:
    for file in entry.body.get("files", []):
        if isinstance(file, dict) and "path" in file and "sha256" in file:
            yield str(file["path"]), str(file["sha256"])


def _file_faults(folder: Path, entered: dict[str, tuple[int, str]], removed: set[str]) -> Iterator[str]:
    for path, (number, its_digest) in entered.items():
        if path in removed:
            continue
        full = folder / path
        if not full.is_file():
            yield f"{path}: missing; entry {number} has it"
        elif file_digest(full) != its_digest:
            yield f"{path}: changed since entry {number}"
    for full in sorted((folder / CLIPS).rglob("*")):
        path = str(full.relative_to(folder))
        if full.is_file() and path not in entered:
            yield f"{path}: added; no entry has it"
        elif full.is_file() and path in removed:
            yield f"{path}: back again; it was entered as removed"
