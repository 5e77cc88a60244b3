"""A scene: a capture to make, and everything in it. Read from TOML; every error names the file, the key and the rule.

::

    [capture]
    rate = "96kHz"              # complex samples a second
    centre = "7.1MHz"
    seconds = 24.0
    seed = 7                    # every random thing follows from it
    format = "ci8"              # cf32_le, ci16_le, ci8 or cu8
    noise_dbfs_hz = -100.0      # noise power per hertz, against a full-scale tone; leave out for none
    start = "2031-03-14T05:00:00Z"

    [[emission]]
    name = "harbour"
    emission = "A3E"
    frequency = "7.08MHz"       # of the carrier, sent or suppressed
    level_dbfs = -30.0          # carrier where a full one is sent (A3E, C3E, AM-STEREO, A1A), else peak envelope power
    message = { kind = "sound", path = "voice.flac" }       # or messages = [ {...}, {...} ] for two
    # offset = "-12.5Hz", drift_hz_s, phase_degrees, audio = "300-2700Hz", start_s, stop_s
    # depth_percent, carrier_db (below peak envelope power), pilot_db, vestige = "1kHz", vestige_sent = "flat"
    # fading = { condition = "mid-latitude moderate" } or { spread = "0.5Hz", delay_s = 1e-3 } or { spread = "1Hz" }

    [[impulses]]
    per_second = 100.0
    length_s = 1e-4
    level_dbfs = -10.0
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from rxchain.emissions import Emission, emission_named
from rxchain.errors import RequestError, SettingError
from rxchain.synthesis.messages import KINDS, Message
from rxchain.synthesis.modulation import Modulation
from rxchain.synthesis.propagation import F1487, Fading
from rxchain.tables import load_table
from rxchain.units import parse_band_hz, parse_frequency_hz

FORMATS = ("cf32_le", "ci16_le", "ci8", "cu8")
MOST_SAMPLES = 200_000_000
_FULL_CARRIER_DB = {"R3E": 18.0, "H3E": 4.5}  # 47 CFR 80.207(c): R3E 18 +- 2 dB, H3E 3 to 6 dB below peak


@dataclass(frozen=True, slots=True)
class Station:
    """One emission of a scene."""

    name: str
    emission: Emission
    frequency_hz: float
    level_dbfs: float
    messages: tuple[Message, ...]
    audio_hz: tuple[float, float]
    how: Modulation = field(default_factory=Modulation)
    offset_hz: float = 0.0
    drift_hz_s: float = 0.0
    phase_degrees: float = 0.0
    start_s: float = 0.0
    stop_s: float | None = None
    fading: Fading | None = None


@dataclass(frozen=True, slots=True)
class Impulses:
    """Impulses at random times, ``per_second`` of them on average, each ``length_s`` long and of random phase."""

    per_second: float
    length_s: float
    level_dbfs: float


@dataclass(frozen=True, slots=True)
class Scene:
    """A whole capture: rate, centre, length, noise and what is in it."""

    rate_hz: float
    centre_hz: float
    seconds: float
    stations: tuple[Station, ...]
    seed: int = 1
    format: str = "cf32_le"
    noise_dbfs_hz: float | None = None
    start: dt.datetime | None = None
    impulses: tuple[Impulses, ...] = ()

    @property
    def n_samples(self) -> int:
        """Length of the capture in samples."""
        return round(self.seconds * self.rate_hz)


def load_scene(path: Path) -> Scene:
    """The scene a file describes; raises :class:`RequestError` that starts with the file's name."""
    return load_table(path, _scene)


def _scene(table: Mapping[str, Any], folder: Path) -> Scene:
    _known(table, "", ("capture", "emission", "impulses"))
    capture = table.get("capture")
    if not isinstance(capture, dict):
        raise SettingError("capture", capture, "a scene has one [capture] table")
    _known(capture, "capture", ("rate", "centre", "seconds", "seed", "format", "noise_dbfs_hz", "start"))
    stations = _tables(table, "emission")
    made = tuple(_named(f"emission {k}", _station, one, folder) for k, one in enumerate(stations, 1))
    names = [station.name for station in made]
    if len(set(names)) < len(names):
        raise SettingError("name", ", ".join(names), "two emissions have the same name")
    scene = Scene(
        rate_hz=parse_frequency_hz(str(_needed(capture, "rate")), "rate"),
        centre_hz=parse_frequency_hz(str(_needed(capture, "centre")), "centre"),
        seconds=_number(capture, "seconds", None, 1e-3, 86_400.0),
        stations=made,
        seed=int(_number(capture, "seed", 1, 0, 2**31)),
        format=_one_of("format", str(capture.get("format", "cf32_le")), FORMATS),
        noise_dbfs_hz=_number(capture, "noise_dbfs_hz", None, -250.0, 0.0) if "noise_dbfs_hz" in capture else None,
        start=_time(capture.get("start")),
        impulses=tuple(_named(f"impulses {k}", _impulses, one) for k, one in enumerate(_tables(table, "impulses"), 1)),
    )
    if not 1.0 <= scene.n_samples <= MOST_SAMPLES:
        raise SettingError(
            "seconds", scene.seconds, f"the capture would have {scene.n_samples} samples, at most {MOST_SAMPLES}"
        )
    for station in scene.stations:
        if abs(station.frequency_hz + station.offset_hz - scene.centre_hz) > scene.rate_hz / 2.0:
            raise SettingError("frequency", station.frequency_hz, f"{station.name} lies outside the capture")
    return scene


def _station(table: Mapping[str, Any], folder: Path) -> Station:
    _known(table, "emission", _STATION_KEYS)
    emission = emission_named(str(_needed(table, "emission")))
    if ("message" in table) == ("messages" in table):
        raise SettingError("message", table.get("message"), "give message = {...} or messages = [{...}, {...}]")
    messages = [table["message"]] if "message" in table else table["messages"]
    if not isinstance(messages, list) or len(messages) != len(emission.messages):
        raise SettingError("messages", messages, f"{emission.name} carries {len(emission.messages)}")
    audio_hz = parse_band_hz(str(table["audio"])) if "audio" in table else emission.audio_hz
    how = Modulation(
        depth=_number(table, "depth_percent", 80.0, 0.0, 400.0) / 100.0,
        carrier_db=_number(table, "carrier_db", _FULL_CARRIER_DB.get(emission.family, float("inf")), 0.0, float("inf")),
        pilot_db=_number(table, "pilot_db", float("inf"), -20.0, float("inf")),
        vestige_hz=parse_frequency_hz(str(table["vestige"]), "vestige") if "vestige" in table else audio_hz[1] / 4.0,
        vestige_is_flat=_one_of("vestige_sent", str(table.get("vestige_sent", "slope")), ("slope", "flat")) == "flat",
        stereo_pilot=bool(table.get("stereo_pilot", True)),
    )
    return Station(
        name=str(_needed(table, "name")),
        emission=emission,
        frequency_hz=parse_frequency_hz(str(_needed(table, "frequency"))),
        level_dbfs=_number(table, "level_dbfs", None, -200.0, 20.0),
        messages=tuple(_named("message", _message, one, folder) for one in messages),
        audio_hz=audio_hz,
        how=how,
        offset_hz=parse_frequency_hz(str(table.get("offset", "0Hz")), "offset"),
        drift_hz_s=_number(table, "drift_hz_s", 0.0, -1e4, 1e4),
        phase_degrees=_number(table, "phase_degrees", 0.0, -360.0, 360.0),
        start_s=_number(table, "start_s", 0.0, 0.0, 86_400.0),
        stop_s=_number(table, "stop_s", None, 0.0, 86_400.0) if "stop_s" in table else None,
        fading=_fading(table["fading"]) if "fading" in table else None,
    )


_STATION_KEYS = (
    "name emission frequency level_dbfs message messages audio depth_percent carrier_db pilot_db vestige vestige_sent "
    "stereo_pilot offset drift_hz_s phase_degrees start_s stop_s fading"
).split()


def _message(table: Mapping[str, Any], folder: Path) -> Message:
    _known(table, "message", ("kind", "frequency", "frequencies", "path", "start_s", "text", "words_per_minute"))
    kind = _one_of("kind", str(_needed(table, "kind")), KINDS)
    frequencies = [table["frequency"]] if "frequency" in table else table.get("frequencies", [])
    if kind in ("tone", "tones") and not frequencies:
        raise SettingError("frequency", "(none)", f"a message of kind {kind} has frequency or frequencies")
    if kind == "morse" and not str(table.get("text", "")).strip():
        raise SettingError("text", "(none)", "keyed text needs some")
    return Message(
        kind=kind,
        frequencies_hz=tuple(parse_frequency_hz(str(one)) for one in frequencies),
        path=folder / str(_needed(table, "path")) if kind == "sound" else None,
        start_s=_number(table, "start_s", 0.0, 0.0, 86_400.0),
        text=str(table.get("text", "")),
        words_per_minute=_number(table, "words_per_minute", 18.0, 5.0, 60.0),
    )


def _fading(table: Mapping[str, Any]) -> Fading:
    _known(table, "fading", ("condition", "spread", "delay_s"))
    if "condition" in table:
        delay_s, spread_hz = F1487[_one_of("condition", str(table["condition"]), tuple(F1487))]
        return Fading(2, delay_s, spread_hz)
    spread_hz = parse_frequency_hz(str(_needed(table, "spread")), "spread")
    if not 0.0 < spread_hz <= 100.0:
        raise SettingError("spread", table["spread"], "must lie above 0 and up to 100 Hz")
    delay_s = _number(table, "delay_s", 0.0, 0.0, 0.1)
    return Fading(2 if "delay_s" in table else 1, delay_s, spread_hz)


def _impulses(table: Mapping[str, Any]) -> Impulses:
    _known(table, "impulses", ("per_second", "length_s", "level_dbfs"))
    return Impulses(
        _number(table, "per_second", None, 1e-3, 1e5),
        _number(table, "length_s", None, 1e-7, 1e-1),
        _number(table, "level_dbfs", None, -200.0, 60.0),
    )


def _named(where: str, make: Callable[..., Any], *arguments: Any) -> Any:
    """What ``make`` makes of a table; its errors say where the table is."""
    if not isinstance(arguments[0], dict):
        raise SettingError(where, arguments[0], "must be a table")
    try:
        return make(*arguments)
    except RequestError as error:
        raise RequestError(f"{where}: {error}") from error


def _tables(table: Mapping[str, Any], key: str) -> list[Any]:
    tables = table.get(key, [])
    if not isinstance(tables, list):
        raise SettingError(key, tables, f"write [[{key}]]")
    return tables


def _known(table: Mapping[str, Any], where: str, keys: list[str] | tuple[str, ...]) -> None:
    for key in table:
        if key not in keys:
            raise SettingError(f"{where}.{key}".strip("."), table[key], "not a key here", "one of " + ", ".join(keys))


def _needed(table: Mapping[str, Any], key: str) -> Any:
    if key not in table:
        raise SettingError(key, "(none)", "is needed here")
    return table[key]


def _number(table: Mapping[str, Any], key: str, default: float | None, low: float, high: float) -> float:
    value = table.get(key, default)
    if value is None:
        raise SettingError(key, "(none)", "is needed here")
    if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
        raise SettingError(key, value, f"must be a number from {low:g} to {high:g}")
    return float(value)


def _one_of(key: str, value: str, known: tuple[str, ...]) -> str:
    if value not in known:
        raise SettingError(key, value, "not offered", "one of " + ", ".join(known))
    return value


def _time(value: object) -> dt.datetime | None:
    if value is None:
        return None
    try:
        time = value if isinstance(value, dt.datetime) else dt.datetime.fromisoformat(str(value))
    except ValueError:
        raise SettingError("start", value, "must be a time like 2031-03-14T05:00:00Z") from None
    return time.replace(tzinfo=dt.UTC) if time.tzinfo is None else time.astimezone(dt.UTC)
