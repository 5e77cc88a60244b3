"""What is wanted of one channel, from the words of a ``--channel`` option or a ``[[channel]]`` table."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Literal, TypeAlias

from rxchain.emissions import EMISSIONS, Emission, emission_named
from rxchain.errors import SettingError
from rxchain.units import format_frequency, parse_band_hz, parse_frequency_hz

AUTO: Literal["auto"] = "auto"
OFF: Literal["off"] = "off"
SPEECH = "speech"
AutoOrLevel: TypeAlias = "Literal['auto', 'off'] | float"

DETECTORS = (AUTO, "envelope", "rectifier", "coherent")
SIDEBANDS = ("both", "upper", "lower", "better", "weighted")
DELAYS = ("full", "live")
DEEMPHASES = (OFF, "nrsc")
LOGS = (OFF, "transmissions", "all")
SLOPES = ("sent", "received")
# Spacing of airband channels: how far off a station may be, and its audio band. ICAO Annex 10 Vol. III 2.2.2.3: carriers within
# 0.005 % (25 kHz) and 0.0005 % (8.33 kHz), at 130 MHz; bands from memory, after ETSI EN 300 676.
SPACINGS = {"25kHz": (6_500.0, (300.0, 3_400.0)), "8.33kHz": (650.0, (350.0, 2_500.0))}
_FIRST_TRY = EMISSIONS["A3E"]
_KEYS_OF_ANY = ("frequency", "emission", "name", "audio", "delay", "agc", "squelch", "notch", "blanker", "log")
_NAME = re.compile(r"[A-Za-z0-9_][A-Za-z0-9._+-]{0,63}")
_DB = re.compile(r"([+-]?\d+(?:\.\d+)?)\s*dB", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class ChannelSettings:
    """One channel, every key decided.

    align_hz : shift of the nominal frequency for an emission with nothing to follow; aligns_by_speech : find it from the
        voice instead.
    transmit_response : measured gain of a vestigial transmitter: frequencies from the carrier in hertz, positive on the
        side sent whole, and gains; None where a straight slope is assumed.
    notch_hz : ``off``, ``auto`` (finds steady tones) or the frequency of one; deemphasis : ``off`` or ``nrsc``.
    blanker_db : ``off``, ``auto`` or the level over the median from which a sample of the capture is an impulse.
    spacing : of airband channels: the carrier is then searched as far off as stations of that spacing may be.
    log : ``off``, ``transmissions`` or ``all``: what the logbook keeps of the channel.
    delay : ``auto`` is ``live`` for a channel that is heard and ``full`` for others.
    emission_given : whether the emission is the user's word; where not, it is a first try, to be identified.
    audio_given : likewise the audio band.
    agc_db : ``auto``, ``off`` or a fixed gain; squelch_db : ``auto``, ``off`` or the SNR that opens.
    """

    name: str
    frequency_hz: float
    emission: Emission
    audio_hz: tuple[float, float]
    detector: str = AUTO
    sideband: str = "both"
    delay: str = AUTO
    align_hz: float = 0.0
    aligns_by_speech: bool = False
    beat_hz: float = 700.0
    vestige_hz: float = 0.0
    slope: str = "sent"
    transmit_response: tuple[tuple[float, ...], tuple[float, ...]] | None = None
    agc_db: AutoOrLevel = AUTO
    squelch_db: AutoOrLevel = AUTO
    notch_hz: AutoOrLevel = OFF
    deemphasis: str = OFF
    blanker_db: AutoOrLevel = OFF
    log: str = OFF
    spacing: str | None = None
    emission_given: bool = True
    audio_given: bool = False

    @property
    def tolerance_hz(self) -> float | None:
        """How far off its frequency a station of the channel's spacing may be; None where no spacing is given."""
        return None if self.spacing is None else SPACINGS[self.spacing][0]


def channel_from_text(text: str) -> ChannelSettings:
    """The channel that ``FREQUENCY EMISSION [key=value ...]`` asks for.

    >>> channel = channel_from_text("7.1MHz J3E-LSB name=net audio=300-2700Hz agc=off squelch=off")
    >>> channel.name, channel.frequency_hz, channel.emission.name, channel.audio_hz
    ('net', 7100000.0, 'J3E-LSB', (300.0, 2700.0))
    """
    words = text.split()
    if len(words) < 2 or "=" in words[0] or "=" in words[1]:
        raise SettingError(
            "channel",
            text,
            "a channel is FREQUENCY EMISSION [key=value ...]",
            "write it like '7.1MHz J3E-LSB name=net'",
        )
    values = {"frequency": words[0], "emission": words[1]}
    for word in words[2:]:
        key, equals, value = word.partition("=")
        if not equals or not value:
            raise SettingError("channel", text, f"{word!r} is not key=value")
        if key in values:
            raise SettingError("channel", text, f"{key} is given twice")
        values[key] = value
    return channel_from_table(values)


def channel_from_table(table: Mapping[str, object], folder: Path = Path()) -> ChannelSettings:
    """The channel that a ``[[channel]]`` table asks for; paths in it start from ``folder``.

    Raises :class:`SettingError` for an unknown key, a bad value, or keys that contradict each other.
    """
    values = {key: str(value) for key, value in table.items()}
    for key in values:
        if key not in _KEYS:
            raise SettingError(key, values[key], "not a key of a channel", "one of " + ", ".join(_KEYS))
    for needed in ("frequency", "emission"):
        if needed not in values:
            raise SettingError("channel", dict(table), f"{needed} is missing")
    frequency_hz = parse_frequency_hz(values["frequency"])
    emission_given = values["emission"] != AUTO
    emission = emission_named(values["emission"]) if emission_given else _FIRST_TRY
    beat_hz = parse_frequency_hz(values.get("beat", "700Hz"), "beat")
    audio_hz = _audio(values, emission, beat_hz)
    spacing = _one_of("spacing", values["spacing"], tuple(SPACINGS)) if "spacing" in values else None
    if spacing is not None and "audio" not in values:
        audio_hz = SPACINGS[spacing][1]
    slope, response = _slope(values.get("slope", SLOPES[0]), values.get("transmit_response"), folder)
    channel = ChannelSettings(
        name=_name(
            values.get("name")
            or f"{format_frequency(frequency_hz)}-{values['emission'] if not emission_given else emission.name}"
        ),
        frequency_hz=frequency_hz,
        emission=emission,
        audio_hz=audio_hz,
        detector=_one_of("detector", values.get("detector", AUTO), DETECTORS),
        sideband=_one_of("sideband", values.get("sideband", "both"), SIDEBANDS),
        delay=_one_of("delay", values["delay"], DELAYS) if "delay" in values else AUTO,
        align_hz=_align(values.get("align", OFF)),
        aligns_by_speech=values.get("align") == SPEECH,
        beat_hz=beat_hz,
        vestige_hz=parse_frequency_hz(values["vestige"], "vestige") if "vestige" in values else audio_hz[1] / 4.0,
        slope=slope,
        transmit_response=response,
        agc_db=_auto_or_level("agc", values.get("agc", AUTO)),
        squelch_db=_auto_or_level("squelch", values.get("squelch", AUTO)),
        notch_hz=_notch(values.get("notch", OFF)),
        deemphasis=_one_of("deemphasis", values.get("deemphasis", OFF), DEEMPHASES),
        blanker_db=_auto_or_level("blanker", values.get("blanker", OFF)),
        log=_one_of("log", values.get("log", OFF), LOGS),
        spacing=spacing,
        emission_given=emission_given,
        audio_given="audio" in values,
    )
    for key, value in values.items():
        _check_use(key, value, channel)
    return channel


def as_emission(channel: ChannelSettings, emission: Emission) -> ChannelSettings:
    """The same channel for another emission: what was not given follows from the emission."""
    keeps_band = channel.audio_given and emission.family != "A1A"
    audio_hz = channel.audio_hz if keeps_band else _default_audio(emission, channel.beat_hz)
    return replace(channel, emission=emission, audio_hz=audio_hz, vestige_hz=audio_hz[1] / 4.0)


def _audio(values: Mapping[str, str], emission: Emission, beat_hz: float) -> tuple[float, float]:
    if "audio" in values:
        low_hz, high_hz = parse_band_hz(values["audio"])
        if low_hz < 20.0:
            raise SettingError("audio", values["audio"], "the lower edge must be at least 20 Hz")
        return low_hz, high_hz
    return _default_audio(emission, beat_hz)


def _default_audio(emission: Emission, beat_hz: float) -> tuple[float, float]:
    if emission.family == "A1A":
        return max(50.0, beat_hz - 250.0), beat_hz + 250.0
    return emission.audio_hz


def _name(text: str) -> str:
    if not _NAME.fullmatch(text):
        raise SettingError(
            "name",
            repr(text),
            "a name is up to 64 letters, digits, '.', '_', '+' or '-', and starts with none of '.+-'",
        )
    return text


def _one_of(key: str, value: str, known: tuple[str, ...]) -> str:
    if value not in known:
        raise SettingError(key, value, "not offered", "one of " + ", ".join(known))
    return value


def _align(value: str) -> float:
    if value in (OFF, SPEECH):
        return 0.0
    if value[0] not in "+-":
        raise SettingError("align", value, "off, speech, or a shift with its sign", "write it like align=+35Hz")
    return parse_frequency_hz(value, "align")


def _auto_or_level(key: str, value: str) -> AutoOrLevel:
    if value == "auto":
        return AUTO
    if value == "off":
        return OFF
    match = _DB.fullmatch(value)
    if not match:
        raise SettingError(key, value, "auto, off, or a level in dB", f"write it like {key}=6dB")
    return float(match[1])


def _slope(
    slope: str, response: str | None, folder: Path
) -> tuple[str, tuple[tuple[float, ...], tuple[float, ...]] | None]:
    if response is None:
        return _one_of("slope", slope, SLOPES), None
    path = folder / response
    rule = "a text file of lines 'FREQUENCY_HZ GAIN', ascending, frequency from the carrier, at least two lines"
    try:
        lines = [line.split("#")[0].replace(",", " ").split() for line in path.read_text(encoding="utf-8").splitlines()]
        rows = [(float(line[0]), float(line[1])) for line in lines if line]
    except (OSError, UnicodeDecodeError, ValueError, IndexError) as error:
        raise SettingError("transmit_response", response, rule, str(error)) from error
    frequencies_hz, gains = tuple(row[0] for row in rows), tuple(row[1] for row in rows)
    if len(rows) < 2 or any(b <= a for a, b in pairwise(frequencies_hz)):
        raise SettingError("transmit_response", response, rule)
    return slope, (frequencies_hz, gains)


def _check_detector(value: str, channel: ChannelSettings) -> None:
    if value != AUTO and value not in channel.emission.detectors:
        raise SettingError(
            "detector",
            value,
            f"cannot serve {channel.emission.name}",
            "one of auto, " + ", ".join(channel.emission.detectors),
        )


def _check_sideband(value: str, channel: ChannelSettings) -> None:
    if value == "both":
        return
    if not channel.emission.is_double_sideband:
        raise SettingError("sideband", value, f"{channel.emission.name} has no choice of sidebands", "leave it out")
    if channel.detector not in (AUTO, "coherent"):
        raise SettingError("sideband", value, "needs the coherent detector", "use detector=coherent or auto")


def _check_spacing(value: str, channel: ChannelSettings) -> None:
    if channel.emission.family != "A3E" or not channel.emission_given:
        raise SettingError("spacing", value, "is for A3E, which the airband uses", "leave it out")


def _check_vestige(_: str, channel: ChannelSettings) -> None:
    if not channel.emission.is_vestigial:
        raise SettingError(
            "vestige", f"{channel.vestige_hz:g}Hz", f"{channel.emission.name} has no vestige", "leave it out"
        )
    if not 50.0 <= channel.vestige_hz <= channel.audio_hz[1]:
        raise SettingError(
            "vestige",
            f"{channel.vestige_hz:g}Hz",
            f"must lie between 50 Hz and the audio band's {channel.audio_hz[1]:g} Hz",
        )


def _check_slope(value: str, channel: ChannelSettings) -> None:
    if not channel.emission.is_vestigial:
        raise SettingError("slope", value, f"{channel.emission.name} has no vestige", "leave it out")


def _check_align(value: str, channel: ChannelSettings) -> None:
    if value != OFF and channel.emission.family != "J3E":
        raise SettingError("align", value, f"{channel.emission.name} is not tuned by hand", "leave it out")


def _check_beat(value: str, channel: ChannelSettings) -> None:
    if channel.emission.family != "A1A":
        raise SettingError("beat", value, f"{channel.emission.name} has no beat note", "leave it out")
    if not 100.0 <= channel.beat_hz <= 3_000.0:
        raise SettingError("beat", value, "must lie between 100 Hz and 3 kHz")


def _notch(value: str) -> AutoOrLevel:
    if value == AUTO:
        return AUTO
    return OFF if value == OFF else parse_frequency_hz(value, "notch")


def _check_notch(value: str, channel: ChannelSettings) -> None:
    if value == OFF:
        return
    if channel.emission.family == "A1A":
        raise SettingError("notch", value, "would take out the note that an A1A channel is heard by", "leave it out")
    if channel.notch_hz != AUTO and not channel.audio_hz[0] <= float(channel.notch_hz) <= channel.audio_hz[1]:
        low_hz, high_hz = channel.audio_hz
        raise SettingError("notch", value, f"must lie within the message's {low_hz:g}-{high_hz:g} Hz")


def _check_deemphasis(value: str, channel: ChannelSettings) -> None:
    if value != OFF and channel.emission.family not in ("A3E", "AM-STEREO", "C3E", "DSB-SC"):
        raise SettingError("deemphasis", value, "is for broadcasts: A3E, AM-STEREO, C3E, DSB-SC", "leave it out")


def _check_blanker(value: str, channel: ChannelSettings) -> None:
    if channel.blanker_db not in (AUTO, OFF) and not 6.0 <= float(channel.blanker_db) <= 60.0:
        raise SettingError("blanker", value, "must lie between 6dB and 60dB", "blanker=auto is 14dB")


def _check_log(value: str, channel: ChannelSettings) -> None:
    if value == "transmissions" and channel.squelch_db == OFF:
        raise SettingError("log", value, "needs a squelch to tell where one begins", "use squelch=auto, or log=all")


def _anything(_: str, __: ChannelSettings) -> None:
    """No rule beyond those of its parser."""


_KEYS: dict[str, Callable[[str, ChannelSettings], None]] = {
    "frequency": _anything,
    "emission": _anything,
    "name": _anything,
    "audio": _anything,
    "detector": _check_detector,
    "sideband": _check_sideband,
    "spacing": _check_spacing,
    "delay": _anything,
    "align": _check_align,
    "beat": _check_beat,
    "vestige": _check_vestige,
    "slope": _check_slope,
    "transmit_response": _check_slope,
    "agc": _anything,
    "squelch": _anything,
    "notch": _check_notch,
    "deemphasis": _check_deemphasis,
    "blanker": _check_blanker,
    "log": _check_log,
}


def _check_use(key: str, value: str, channel: ChannelSettings) -> None:
    if not channel.emission_given and key not in _KEYS_OF_ANY and value not in (AUTO, OFF):
        raise SettingError(
            key, value, "with emission=auto it follows from what is found", "leave it out, or name the emission"
        )
    _KEYS[key](value, channel)
