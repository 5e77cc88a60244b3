"""A station file: a source and its channels, in TOML.

::

    [source]
    path = "coast.sigmf-meta"      # a recording, from the file's own folder; or receiver = "rtlsdr:00000001"

    [[channel]]
    frequency = "518kHz"
    emission = "A3E"
    name = "harbour"

    [log]
    folder = "log"                 # from the file's own folder

Every error names the file, the key, the value and the rule.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from rxchain.chain.channel_settings import ChannelSettings, channel_from_table
from rxchain.errors import RequestError, SettingError
from rxchain.tables import load_table

_SOURCE_KEYS = ("path", "receiver", "rate", "centre", "capture", "gain", "ppm", "direct_sampling", "bias_voltage")


@dataclass(frozen=True, slots=True)
class Station:
    """source : what ``rxchain receive`` would take as SOURCE. source_options : its further keys, as written. log :
    folder of the logbook, None where the file has none.
    """

    source: str
    source_options: dict[str, str]
    channels: tuple[ChannelSettings, ...]
    log: Path | None = None


def load_station(path: Path) -> Station:
    """The station a file describes; raises :class:`RequestError` with the file's name before the fault."""
    return load_table(path, _station)


def _station(table: dict[str, object], folder: Path) -> Station:
    for key in table:
        if key not in ("source", "channel", "log"):
            raise SettingError(key, "...", "not a table of a station file", "there are [source], [log] and [[channel]]")
    source = table.get("source")
    if not isinstance(source, dict):
        raise SettingError("source", source, "a station file has one [source] table")
    for key in source:
        if key not in _SOURCE_KEYS:
            raise SettingError(
                f"source.{key}", source[key], "not a key of a source", "one of " + ", ".join(_SOURCE_KEYS)
            )
    if ("path" in source) == ("receiver" in source):
        raise SettingError("source", source, "needs either path (a recording) or receiver (rtlsdr[:serial])")
    channels = table.get("channel")
    if not isinstance(channels, list) or not channels:
        raise SettingError("channel", channels, "a station file has at least one [[channel]] table")
    options = {key: str(value) for key, value in source.items() if key not in ("path", "receiver")}
    name = str(folder / str(source["path"])) if "path" in source else str(source["receiver"])
    log = _log(table.get("log"), folder)
    # In a station that has a logbook every channel is logged that does not say otherwise.
    usual = {} if log is None else {"log": "transmissions"}
    made = tuple(_channel(number, one, folder, usual) for number, one in enumerate(channels, 1))
    return Station(name, options, made, log)


def _log(table: object, folder: Path) -> Path | None:
    if table is None:
        return None
    if not isinstance(table, dict) or set(table) != {"folder"}:
        raise SettingError("log", table, "the [log] table has one key", 'write folder = "log"')
    return folder / str(table["folder"])


def _channel(number: int, table: object, folder: Path, usual: dict[str, str]) -> ChannelSettings:
    if not isinstance(table, dict):
        raise SettingError(f"channel {number}", table, "must be a table")
    try:
        return channel_from_table(usual | table, folder)
    except SettingError as error:
        raise RequestError(f"channel {number}: {error}") from error


def check_names(channels: tuple[ChannelSettings, ...]) -> None:
    """Raises :class:`SettingError` where two channels of a run would write the same file."""
    seen: set[str] = set()
    for channel in channels:
        if channel.name.lower() in seen:
            raise SettingError("name", channel.name, "two channels of one run have this name", "give each a name=")
        seen.add(channel.name.lower())
