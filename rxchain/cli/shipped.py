"""Where the files shipped with the program lie: inside the installed package, or beside it in a checkout."""

from __future__ import annotations

from pathlib import Path

from rxchain.errors import SourceError


def shipped(name: str) -> Path:
    """Path of a shipped file, such as ``configs/coast.toml``; raises :class:`SourceError` where it is missing."""
    package = Path(__file__).resolve().parents[1]
    for folder in (package / "shipped", package.parent):
        if (folder / name).is_file():
            return folder / name
    raise SourceError(f"{name}: not found beside the program; install it again")
