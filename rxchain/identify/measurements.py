"""The measurements by which emissions are told apart: 21 numbers a channel, each with a meaning of its own."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.identify.carrier_measurements import carrier_measurements
from rxchain.identify.mirror_measurements import mirror_measurements
from rxchain.identify.reference import find_references
from rxchain.identify.short_time import INNER, decibels, prepare
from rxchain.identify.steady_tones import steady_tone_shares
from rxchain.streams import Bools, Floats

# What each says, and the range in which it says it.
MEANING: dict[str, tuple[float, float, str]] = {
    "peak": (0, 50, "strongest 200 Hz over the noise floor, dB"),
    "line": (-8, 50, "persistent line over its surroundings, dB"),
    "key": (0, 40, "on-off swing of the line, dB"),
    "c_pep": (-45, 3, "line against peak envelope power, dB"),
    "line_out": (-30, 30, "power beside the line over power in it, dB"),
    "occ": (1, 4, "occupied width without the line, log10 of Hz"),
    "bal_hi": (-1, 1, "balance of the sides beyond 1.1 kHz"),
    "minor_lo": (-35, 5, "weaker over stronger side below 640 Hz, dB"),
    "coh": (0, 3, "coherence of the mirrored sides"),
    "coh_lo": (0, 3, "coherence of the mirrored sides below 770 Hz"),
    "magc": (0, 3, "agreement of the mirrored sides' magnitudes"),
    "flip": (-3, 0.3, "changes of sign between the mirrored sides"),
    "t_lo": (0, 1.2, "mirrored part of the stronger side below 540 Hz"),
    "tr_lo": (-1, 1.2, "mirrored part in step with the carrier (+) or across it (-)"),
    "nc": (0, 3, "one phase axis through the sidebands"),
    "z2p": (-5, 35, "line of the squared signal, dB"),
    "agree": (0, 1, "share of the squared line that lies at the carrier"),
    "pilot25": (-5, 40, "25 Hz pilot in the carrier's phase, dB"),
    "kappa": (-0.7, 2.5, "peakiness of the envelope, 0 where it is constant"),
    "syl": (0, 9, "syllabic swing of the sidebands, dB"),
    "burst": (0, 40, "strongest moments over the noise, dB"),
}
NAMES = tuple(MEANING)
LOWEST = np.array([MEANING[name][0] for name in NAMES], np.float64)
HIGHEST = np.array([MEANING[name][1] for name in NAMES], np.float64)
LEAST_S, MOST_S = 1.0, 5.0


@dataclass(frozen=True, slots=True)
class Measured:
    """Windows of several channels, measured.

    values : float64, (channels, 21), in the order of :data:`NAMES`. reference_hz : carrier, suppressed carrier, or 0.
    is_line, is_square : where that comes from. is_upper : whether the upper side is the stronger. floor : noise density,
    in units of the channel's own power per hertz. steady_tones : share of the message that is held tones, 0 to 1; no
    evidence, but names need more of it where there are. seconds : length of the windows.
    """

    values: Floats
    reference_hz: Floats
    is_line: Bools
    is_square: Bools
    is_upper: Bools
    is_empty: Bools
    steady_tones: Floats
    seconds: float


def measure(iq: NDArray[np.complexfloating], reach_hz: float = 120.0) -> Measured:
    """Measures windows of 1 to 5 s; iq : (channels, samples) at 12 kHz, flat over ±5.6 kHz, the carrier within
    ±``reach_hz`` of 0 Hz. Scale and phase do not matter; a channel of zeros or of no numbers is measured as noise.
    """
    windows = prepare(iq)
    found = find_references(windows, reach_hz)
    sides, is_upper = mirror_measurements(windows, found)
    by_name = {
        "peak": decibels(np.max(windows.smoothed[:, INNER], axis=1) / windows.floor),
        **carrier_measurements(windows, found),
        **sides,
        "z2p": found.square_db,
        "agree": found.agreement,
    }
    values = np.stack([by_name[name] for name in NAMES], axis=1).astype(np.float64)
    values = np.clip(np.nan_to_num(values, nan=0.0, posinf=50.0, neginf=-50.0), LOWEST, HIGHEST)
    steady = steady_tone_shares(windows, found)
    return Measured(
        values, found.hz, found.is_line, found.is_square, is_upper, windows.is_empty, steady, windows.seconds
    )
