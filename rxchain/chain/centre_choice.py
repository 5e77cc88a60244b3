"""Where to tune a receiver so that it hears all channels, and its own spike at the middle is in none of them.

A receiver that converts to zero frequency has a spike there, from the converter's offset and its own oscillator. Tuning
beside the channels keeps it out of the way.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

from rxchain.chain.channel_settings import ChannelSettings
from rxchain.chain.grouping import half_width_hz
from rxchain.errors import SettingError
from rxchain.units import format_frequency

# Beyond this share of the rate on either side the receiver's filter falls off, and what lies outside folds in.
_USABLE = 0.4
_CLEAR_HZ = 10_000.0  # the spike's skirts (1/f noise of the converter; common practice)


def centre_beside(channels: Sequence[ChannelSettings], rate_hz: float) -> float:
    """The frequency to tune to: as central as can be with 10 kHz between it and every channel, else with the most.

    Whole hertz. Raises :class:`SettingError` where the channels lie too far apart for the rate.
    """
    bands = sorted(_band_hz(channel) for channel in channels)
    lowest_hz, highest_hz = bands[0][0], max(high for _, high in bands)
    reach_hz = _USABLE * rate_hz
    if highest_hz - lowest_hz > 2 * reach_hz:
        raise SettingError(
            "rate",
            format_frequency(rate_hz),
            f"the channels reach from {format_frequency(lowest_hz)} to {format_frequency(highest_hz)}, and "
            f"{100 * 2 * _USABLE:.0f} % of the rate can be used",
            "raise --rate, or receive fewer channels",
        )
    middle_hz = (lowest_hz + highest_hz) / 2.0
    low_hz, high_hz = max(1.0, highest_hz - reach_hz), lowest_hz + reach_hz
    edges_hz = sorted(edge for band in bands for edge in band)
    candidates_hz = {middle_hz, low_hz, high_hz, *((a + b) / 2.0 for a, b in pairwise(edges_hz))}
    candidates_hz |= {edge + side * _CLEAR_HZ for edge in edges_hz for side in (-1, 1)}

    def merit(one_hz: float) -> tuple[float, float]:
        return min(_clearance_hz(one_hz, bands), _CLEAR_HZ), -abs(one_hz - middle_hz)

    allowed_hz = [one for one in candidates_hz if low_hz <= one <= high_hz]
    best_hz = max(allowed_hz, key=merit)
    return float(round(best_hz))


def channels_on_spike(channels: Sequence[ChannelSettings], centre_hz: float) -> list[str]:
    """Names of the channels in whose band the middle lies."""
    return [channel.name for channel in channels if _clearance_hz(centre_hz, [_band_hz(channel)]) <= 0.0]


def _band_hz(channel: ChannelSettings) -> tuple[float, float]:
    half_hz = half_width_hz(channel)
    return channel.frequency_hz - half_hz, channel.frequency_hz + half_hz


def _clearance_hz(frequency_hz: float, bands: Sequence[tuple[float, float]]) -> float:
    """Distance to the nearest band; negative inside one."""
    return min(max(low - frequency_hz, frequency_hz - high) for low, high in bands)
