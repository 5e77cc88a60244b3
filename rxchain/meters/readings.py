"""Figures from sums, each with one standard deviation that follows from the data."""

from __future__ import annotations

import numpy as np

from rxchain.meters.tally import Tally
from rxchain.streams import Reading

_DB = 10.0 / np.log(10.0)
# What remains however long one measures: the grid of the meter's bins against the edges of the detector's filter, and
# what phase noise leaks of the message into its quadrature.
_SNR_FLOOR = 0.012
_LEVEL_FLOOR_DB = 0.02


def ratio_reading_db(ratio: float, relative_error: float) -> Reading:
    """A power ratio in decibels, from its relative error."""
    return Reading(float(10.0 * np.log10(ratio)), float(_DB * max(relative_error, 0.003)))


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
    quadrature = float(tally.by_quadrature[channel]) / chunks
    if noise <= 0 or (quadrature < 0.5 and tally.mean("noise_share", channel) < least_noise_share):
        return None
    snr = total / noise - 1.0
    samples = width_hz * chunks * chunk_s
    own = np.sqrt(1.0 / samples + _SNR_FLOOR**2)
    error = quadrature * own + (1.0 - quadrature) * tally.floor_error_of(channel)
    deviation = float(np.sqrt((1.0 + snr) ** 2 * error**2 + max(1.0 + 2.0 * snr, 0.0) / samples))
    if snr <= 2.0 * deviation and snr < 0.05:
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
    error2 = (noise * tally.floor_error_of(channel)) ** 2
    error2 += (2.0 * max(sidebands, 0.0) * noise + noise**2) / samples
    deviation = np.sqrt(error2) * carrier_power / (max(sidebands, 0.0) + carrier_power) ** 2
    return Reading(100.0 * share, float(np.hypot(100.0 * deviation, 0.02)))
