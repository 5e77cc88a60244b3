"""The filters by which a channel's settings become its coherent detector, and the bands of its envelope detector."""

from __future__ import annotations

from functools import partial

import numpy as np

from rxchain.audio.deemphasis import deemphasis_taps
from rxchain.chain.channel_settings import OFF, ChannelSettings
from rxchain.detectors import vestigial
from rxchain.detectors.envelope import emission_band
from rxchain.detectors.sidebands import both_sidebands, one_sideband, quarter_turned
from rxchain.detectors.stereo import left_and_right_taps
from rxchain.emissions import Side
from rxchain.kernels.fir import ComplexTaps

# The envelope detector's own band reaches this far onto the side that a single sideband leaves empty, for the carrier.
_CARRIER_HZ = 50.0


def coherent_taps(
    channel: ChannelSettings, rate_hz: float, sideband: str | None = None, live: bool = False
) -> list[ComplexTaps]:
    """One filter a message. ``sideband`` overrides the channel's own choice for a double sideband."""
    return [_deemphasised(taps, channel, rate_hz) for taps in _flat_taps(channel, rate_hz, sideband, live)]


def _flat_taps(channel: ChannelSettings, rate_hz: float, sideband: str | None, live: bool) -> list[ComplexTaps]:
    emission, (low_hz, high_hz) = channel.emission, channel.audio_hz
    match emission.family:
        case "A3E" | "DSB-SC":
            return [_double_sideband(sideband or channel.sideband, low_hz, high_hz, rate_hz, live)]
        case "J3E" | "R3E" | "H3E":
            return [one_sideband(emission.side or Side.UPPER, low_hz, high_hz, rate_hz, live)]
        case "A1A":
            return [one_sideband(Side.UPPER, low_hz, high_hz, rate_hz, live)]
        case "B8E":
            return [one_sideband(side, low_hz, high_hz, rate_hz, live) for side in (Side.UPPER, Side.LOWER)]
        case "QAM":
            band = both_sidebands(low_hz, high_hz, rate_hz, live=live)
            return [band, quarter_turned(band)]
        case "AM-STEREO":
            # The 25 Hz pilot lies below the message.
            return list(left_and_right_taps(both_sidebands(low_hz, high_hz, rate_hz, steep=True)))
        case _:
            band = both_sidebands(low_hz, high_hz, rate_hz, live=live)
            return [vestigial.vestigial(emission.side or Side.UPPER, _weight(channel), band, rate_hz)]


def envelope_band(channel: ChannelSettings, rate_hz: float, live: bool = False) -> ComplexTaps:
    """The band about the carrier that the emission itself fills."""
    high_hz, side = channel.audio_hz[1], channel.emission.side
    if side is None:
        return emission_band(-high_hz, high_hz, rate_hz, live)
    beyond_hz = channel.vestige_hz if channel.emission.is_vestigial else _CARRIER_HZ
    upper = emission_band(-beyond_hz, high_hz, rate_hz, live)
    return upper if side is Side.UPPER else np.conj(upper)


def message_taps(channel: ChannelSettings, rate_hz: float, live: bool = False) -> ComplexTaps:
    """The audio band that follows an envelope."""
    return _deemphasised(both_sidebands(*channel.audio_hz, rate_hz, live=live), channel, rate_hz)


def _deemphasised(taps: ComplexTaps, channel: ChannelSettings, rate_hz: float) -> ComplexTaps:
    return taps if channel.deemphasis == OFF else np.convolve(taps, deemphasis_taps(rate_hz))


def _double_sideband(sideband: str, low_hz: float, high_hz: float, rate_hz: float, live: bool) -> ComplexTaps:
    if sideband in ("upper", "lower"):
        # Twice: one sideband has half the amplitude of the message on both.
        return np.asarray(2.0 * one_sideband(Side[sideband.upper()], low_hz, high_hz, rate_hz, live))
    return both_sidebands(low_hz, high_hz, rate_hz, live=live)


def _weight(channel: ChannelSettings) -> vestigial.Weight:
    if channel.transmit_response is not None:
        frequencies_hz, gains = (np.array(column) for column in channel.transmit_response)
        return partial(vestigial.weight_for_response, response_hz=frequencies_hz, response=gains)
    weight = vestigial.weight_for_sent if channel.slope == "sent" else vestigial.weight_for_received
    return partial(weight, vestige_hz=channel.vestige_hz)
