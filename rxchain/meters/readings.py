"""Figures from sums, each with one standard deviation that follows from the data."""

from __future__ import annotations

import numpy as np

from rxchain.meters.tally import Tally
from rxchain.streams import Reading

_DB = 10.0 / np.log(10.0)
# What remains however long one measures: the grid of the meter's bins against the edges of the detector's filter.
_SNR_FLOOR = 0.005
# How much may be left of a message that was taken out of the quadrature component: power, measured on shaken phases and
# unequal sidebands.
_LEFT_OF_LEAK = 0.006
_LEVEL_FLOOR_DB = 0.02
_LEAST_RATIO_ERROR, _LEAST_SHARE_ERROR = 0.005, 1e-4
_SURELY_SENT = 3.0  # deviations by which a message must exceed nothing


def ratio_reading_db(ratio: float, relative_error: float) -> Reading:
    """A power ratio in decibels, from its relative error."""
    return Reading(float(10.0 * np.log10(ratio)), float(_DB * max(relative_error, 0.003)))


def noise_error(tally: Tally, channel: int, width_hz: float, chunk_s: float) -> float:
    """Relative error of the mean noise: of what the quadrature component held, or of the floor where there is none."""
    quadrature = tally.mean("by_quadrature", channel)
    samples = max(width_hz * float(tally.chunks[channel]) * chunk_s, 1.0)
    noise = max(tally.mean("floor", channel) * width_hz, 1e-300)
    left = _LEFT_OF_LEAK * tally.mean("leaked", channel) / noise
    own = float(np.sqrt(1.0 / samples + _SNR_FLOOR**2 + left**2))
    return quadrature * own + (1.0 - quadrature) * tally.floor_error_of(channel)


def snr_reading(
    tally: Tally, channel: int, n_messages: int, width_hz: float, chunk_s: float, least_noise_share: float
) -> Reading | None:
    """Message power over noise power; None where nothing was sent or the noise cannot be told.

    var(snr) = (1 + s)^2 (relative error of the noise)^2 + (1 + 2 s) / (B T): a message's power is known, the noise in it
    and the noise that is subtracted are not.
    """
    chunks = float(tally.chunks[channel])
    if not chunks:
        return None
    total = float(tally.message[channel, :n_messages].sum()) / chunks
    noise = float(tally.noise[channel, :n_messages].sum()) / chunks
    quadrature = tally.mean("by_quadrature", channel)
    if noise <= 0 or (quadrature < 0.5 and tally.mean("noise_share", channel) < least_noise_share):
        return None
    snr = total / noise - 1.0
    samples = width_hz * chunks * chunk_s
    error = noise_error(tally, channel, width_hz, chunk_s)
    deviation = float(np.sqrt((1.0 + snr) ** 2 * error**2 + max(1.0 + 2.0 * snr, 0.0) / samples))
    if snr < _SURELY_SENT * np.sqrt(error**2 + 1.0 / samples):  # as nothing would do by chance
        return None
    return Reading(float(10.0 * np.log10(snr)), float(_DB * max(deviation / snr, 0.003)))


def level_reading(tally: Tally, channel: int) -> Reading | None:
    """Mean power in the channel, against a full-scale tone; its scatter from chunk to chunk tells the uncertainty."""
    chunks = float(tally.chunks[channel])
    level = tally.mean("level", channel)
    if level <= 0:
        return None
    variance = max(tally.mean("level_squared", channel) / level**2 - 1.0, 0.0)
    # Neighbouring chunks of a programme are not independent: a correlation time of about two of them is reckoned with.
    deviation = np.sqrt(2.0 * variance / max(chunks, 1.0))
    return Reading(float(10.0 * np.log10(level)), float(np.hypot(_DB * deviation, _LEVEL_FLOOR_DB)))


def efficiency_reading(
    tally: Tally, channel: int, carrier_power: float, width_hz: float, chunk_s: float
) -> Reading | None:
    """Sideband power over total power, percent."""
    chunks = float(tally.chunks[channel])
    if not chunks or carrier_power <= 0:
        return None
    noise = tally.mean("floor", channel) * width_hz
    sidebands = tally.mean("sidebands", channel) - noise
    share = max(sidebands, 0.0) / (max(sidebands, 0.0) + carrier_power)
    samples = max(width_hz * chunks * chunk_s, 1.0)
    error2 = (noise * noise_error(tally, channel, width_hz, chunk_s)) ** 2
    error2 += (2.0 * max(sidebands, 0.0) * noise + noise**2) / samples
    deviation = np.sqrt(error2) * carrier_power / (max(sidebands, 0.0) + carrier_power) ** 2
    # What the edges of the bins and of the chunks leave unsure of either power.
    ratio = _LEAST_RATIO_ERROR * share * (1.0 - share)
    return Reading(100.0 * share, float(100.0 * np.hypot(np.hypot(deviation, ratio), _LEAST_SHARE_ERROR)))
