"""Reading the TOML files that describe stations and scenes."""

from __future__ import annotations

import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

from rxchain.errors import RequestError

T = TypeVar("T")


def load_table(path: Path, make: Callable[[dict[str, Any], Path], T]) -> T:
    """What ``make`` makes of a file's table and its folder; every :class:`RequestError` starts with the file's name."""
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise RequestError(f"{path}: no such file") from error
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise RequestError(f"{path}: not a readable TOML file: {error}") from error
    try:
        return make(table, path.parent)
    except RequestError as error:
        raise RequestError(f"{path}: {error}") from error
