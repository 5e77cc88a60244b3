"""A channel's settings one step on: what the keys of an operator change."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TypeVar

from rxchain.chain.channel_settings import AUTO, OFF, SIDEBANDS, ChannelSettings, as_emission
from rxchain.emissions import EMISSIONS

T = TypeVar("T")

_SPEECH_BANDS_HZ = ((300.0, 2_700.0), (200.0, 3_400.0), (500.0, 2_000.0))
_PROGRAMME_BANDS_HZ = ((100.0, 4_500.0), (300.0, 2_700.0), (50.0, 5_000.0))
_SQUELCHES = (AUTO, 6.0, 12.0, OFF)


def retuned(channel: ChannelSettings, by_hz: float) -> ChannelSettings:
    """The channel so much higher."""
    return replace(channel, frequency_hz=channel.frequency_hz + by_hz)


def next_emission(channel: ChannelSettings, by: int = 1) -> ChannelSettings:
    """The channel for the next emission of the table, which counts as given from then on."""
    names = list(EMISSIONS)
    name = names[(names.index(channel.emission.name) + by) % len(names)]
    plain = replace(channel, detector=AUTO, sideband="both", aligns_by_speech=False, align_hz=0.0, notch_hz=OFF)
    return replace(as_emission(plain, EMISSIONS[name]), emission_given=True)


def next_detector(channel: ChannelSettings) -> ChannelSettings:
    """The next detector that can serve; choosing one by hand ends the choice of a sideband."""
    detector = _after((AUTO, *channel.emission.detectors), channel.detector)
    return replace(
        channel, detector=detector, sideband="both" if detector not in (AUTO, "coherent") else channel.sideband
    )


def next_sideband(channel: ChannelSettings) -> ChannelSettings:
    """The other sideband of a single or vestigial emission; for a double sideband the next way to use its two."""
    emission = channel.emission
    if emission.side is not None:
        other = f"{emission.family}-{'LSB' if emission.name.endswith('USB') else 'USB'}"
        return replace(channel, emission=EMISSIONS[other], emission_given=True)
    if not emission.is_double_sideband:
        return channel
    detector = AUTO if channel.detector not in (AUTO, "coherent") else channel.detector
    sideband = _after(SIDEBANDS, channel.sideband)
    return replace(channel, sideband=sideband, detector=detector)


def next_band(channel: ChannelSettings) -> ChannelSettings:
    """The next of the usual audio bands."""
    if channel.emission.family == "A1A":
        return channel
    is_speech = channel.emission.is_single_sideband or channel.emission.family == "B8E"
    audio_hz = _after(_SPEECH_BANDS_HZ if is_speech else _PROGRAMME_BANDS_HZ, channel.audio_hz)
    vestige_hz = min(channel.vestige_hz, audio_hz[1]) if channel.emission.is_vestigial else channel.vestige_hz
    return replace(channel, audio_hz=audio_hz, audio_given=True, vestige_hz=vestige_hz)


def next_squelch(channel: ChannelSettings) -> ChannelSettings:
    """Automatic, from 6 dB, from 12 dB, open; a channel that logs transmissions keeps one."""
    squelches = tuple(one for one in _SQUELCHES if one != OFF or channel.log != "transmissions")
    return replace(channel, squelch_db=_after(squelches, channel.squelch_db))


def next_notch(channel: ChannelSettings) -> ChannelSettings:
    """The automatic notch on or off."""
    if channel.emission.family == "A1A":
        return channel
    return replace(channel, notch_hz=AUTO if channel.notch_hz == OFF else OFF)


def in_words(channel: ChannelSettings) -> str:
    """What the keys can change of a channel, on one line."""
    low_hz, high_hz = channel.audio_hz
    squelch = channel.squelch_db if isinstance(channel.squelch_db, str) else f"{channel.squelch_db:g} dB"
    parts = [f"{channel.emission.name}", f"detector {channel.detector}"]
    if channel.emission.is_double_sideband:
        parts.append(f"sideband {channel.sideband}")
    parts += [f"audio {low_hz:g}-{high_hz:g} Hz", f"squelch {squelch}"]
    if channel.notch_hz != OFF:
        parts.append("notch")
    return ", ".join(parts)


def _after(values: Sequence[T], value: T) -> T:
    """The one that follows, the first where the value is none of them."""
    return values[(list(values).index(value) + 1) % len(values)] if value in values else values[0]
