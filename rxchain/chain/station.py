"""A station file: a source, its channels, and what is logged, in TOML.

::

    [source]
    path = "coast.sigmf-meta"      # a recording, from the file's own folder; or receiver = "rtlsdr:00000001"

    [log]
    folder = "log"                 # from the file's own folder; channels are logged unless they say log = "off"
    budget = "20GB"                # files beyond it are removed, oldest and weakest first; entries stay
    keep_days = 90

    [[channel]]
    frequency = "518kHz"
    emission = "A3E"
    name = "harbour"

    [[grid]]                       # a channel at each step, named by its frequency
    from = "118MHz"
    to = "118.5MHz"
    spacing = "25kHz"
    emission = "A3E"               # and any other key of a channel; 25kHz and 8.33kHz are those of the airband

Everything that is wrong is told at once, each with its table, key, value and rule.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from rxchain.chain.channel_settings import SPACINGS, ChannelSettings, channel_from_table
from rxchain.errors import RequestError, SettingError
from rxchain.tables import load_table
from rxchain.units import format_frequency, parse_bytes, parse_frequency_hz

T = TypeVar("T")

MOST_CHANNELS = 2_000
_SOURCE_KEYS = (
    "path", "receiver", "rate", "centre", "capture", "gain", "ppm", "direct_sampling", "bias_voltage",
)  # fmt: skip
_LOG_KEYS = ("folder", "budget", "keep_days")
_TABLES = ("source", "log", "channel", "grid")


@dataclass(frozen=True, slots=True)
class LogRules:
    """Where the logbook is, and how much of it is kept; None where nothing limits it."""

    folder: Path
    budget_bytes: int | None = None
    keep_days: float | None = None


@dataclass(frozen=True, slots=True)
class Station:
    """source : what ``rxchain receive`` would take as SOURCE. source_options : its further keys, as written. log : None
    where the file has none.
    """

    source: str
    source_options: dict[str, str]
    channels: tuple[ChannelSettings, ...]
    log: LogRules | None = None


class _Faults:
    """Gathers what is wrong, so that one look at the file mends it all."""

    def __init__(self) -> None:
        self.said: list[str] = []

    def trying(self, where: str, make: Callable[[], T]) -> T | None:
        """What ``make`` makes; its fault is kept, with the table it is in."""
        try:
            return make()
        except RequestError as error:
            self.said.append(f"{where}{error}")
            return None

    def raise_all(self) -> None:
        """Raises one error that holds them all."""
        if self.said:
            raise RequestError("; also ".join(self.said))


def load_station(path: Path) -> Station:
    """The station a file describes; raises :class:`RequestError` with the file's name before the faults."""
    return load_table(path, _station)


def _station(table: Mapping[str, object], folder: Path) -> Station:
    faults = _Faults()
    for key in table:
        if key not in _TABLES:
            faults.said.append(f"{key}: not a table of a station file; there are " + ", ".join(_TABLES))
    source = faults.trying("", lambda: _source(table.get("source"), folder)) or ("", {})
    log = faults.trying("", lambda: _log(table.get("log"), folder)) if "log" in table else None
    # In a station that has a logbook every channel is logged that does not say otherwise.
    usual = {"log": "transmissions"} if "log" in table else {}
    channels: list[ChannelSettings] = []
    for number, one in enumerate(_tables(table, "channel", faults), 1):
        made = faults.trying(f"channel {number}: ", lambda one=one: channel_from_table(usual | one, folder))  # type: ignore[misc]
        channels += [made] if made else []
    for number, one in enumerate(_tables(table, "grid", faults), 1):
        channels += faults.trying(f"grid {number}: ", lambda one=one: _grid(usual | one, folder)) or []  # type: ignore[misc]
    if not channels and not faults.said:
        faults.said.append("channel=None: a station file has at least one [[channel]] or [[grid]] table")
    faults.raise_all()
    return Station(source[0], source[1], tuple(channels), log)


def _source(source: object, folder: Path) -> tuple[str, dict[str, str]]:
    if not isinstance(source, dict):
        raise SettingError("source", source, "a station file has one [source] table")
    for key in source:
        if key not in _SOURCE_KEYS:
            raise SettingError(
                f"source.{key}", source[key], "not a key of a source", "one of " + ", ".join(_SOURCE_KEYS)
            )
    if ("path" in source) == ("receiver" in source):
        raise SettingError("source", source, "needs either path (a recording) or receiver (rtlsdr[:serial])")
    options = {key: str(value) for key, value in source.items() if key not in ("path", "receiver")}
    return str(folder / str(source["path"])) if "path" in source else str(source["receiver"]), options


def _log(table: object, folder: Path) -> LogRules:
    if not isinstance(table, dict) or "folder" not in table:
        raise SettingError("log", table, "the [log] table names a folder", 'write folder = "log"')
    for key in table:
        if key not in _LOG_KEYS:
            raise SettingError(f"log.{key}", table[key], "not a key of a log", "one of " + ", ".join(_LOG_KEYS))
    days = table.get("keep_days")
    if days is not None and (isinstance(days, bool) or not isinstance(days, int | float) or days <= 0):
        raise SettingError("log.keep_days", days, "must be a number of days above 0")
    budget = parse_bytes(str(table["budget"]), "log.budget") if "budget" in table else None
    return LogRules(folder / str(table["folder"]), budget, None if days is None else float(days))


def _tables(table: Mapping[str, object], name: str, faults: _Faults) -> list[dict[str, object]]:
    tables = table.get(name, [])
    if not isinstance(tables, list) or not all(isinstance(one, dict) for one in tables):
        faults.said.append(f"{name}: must be tables, written [[{name}]]")
        return []
    return tables


def _grid(table: Mapping[str, object], folder: Path) -> list[ChannelSettings]:
    """A channel at each step from one frequency to another, both included."""
    for key in ("from", "to", "spacing"):
        if key not in table:
            raise SettingError("grid", dict(table), f"{key} is missing")
    for key in ("frequency", "name"):
        if key in table:
            raise SettingError(key, table[key], "follows from the grid", "leave it out")
    low_hz, high_hz, step_hz = (parse_frequency_hz(str(table[key]), key) for key in ("from", "to", "spacing"))
    spacing = str(table["spacing"])
    if spacing == "8.33kHz":
        step_hz = 25_000.0 / 3.0  # which is what the trade means by it
    if step_hz <= 0.0 or high_hz < low_hz:
        raise SettingError("spacing", table["spacing"], "must be above 0, and from at most to")
    count = int((high_hz - low_hz) / step_hz + 1.0 + 1e-6)
    if count > MOST_CHANNELS:
        raise SettingError("spacing", table["spacing"], f"makes {count} channels; at most {MOST_CHANNELS} are served")
    keys = {key: value for key, value in table.items() if key not in ("from", "to", "spacing")}
    if spacing in SPACINGS and table.get("emission") == "A3E":
        keys["spacing"] = spacing
    frequencies_hz = [low_hz + k * step_hz for k in range(count)]
    return [
        channel_from_table({**keys, "frequency": f"{hz:.3f}Hz", "name": format_frequency(round(hz))}, folder)
        for hz in frequencies_hz
    ]


def check_names(channels: tuple[ChannelSettings, ...]) -> None:
    """Raises :class:`SettingError` where two channels of a run would write the same file."""
    seen: set[str] = set()
    for channel in channels:
        if channel.name.lower() in seen:
            raise SettingError("name", channel.name, "two channels of one run have this name", "give each a name=")
        seen.add(channel.name.lower())
