"""Notice that a line much stronger than the carrier or pilot followed has come up.

A receiver that waits on a quiet channel may hold on to some weak spurious line. Each channel that follows a line is
looked at now and then; another that stands far over it, as strong as it has been in the last half minute, is taken up
if it stays for nearly half a second, unless it would lie in the message of the pilot followed. In a selective fade the
sidebands outgrow the carrier, but not the carrier as it was.
"""

from __future__ import annotations

import numpy as np

from rxchain.carrier.acquisition import QUICK_COVARIANCE, Found
from rxchain.carrier.line_choice import LineChoice
from rxchain.carrier.line_fit import peak_bins
from rxchain.carrier.line_spectra import LineSpectra
from rxchain.streams import Bools, ComplexBlock, Counts, Floats

_TURNS = 8  # a channel's turn comes at every so manieth spectrum
_STRONGER = 4.0  # power: 6 dB
_CLEAR_DB = 15.5  # over the mean of the band, as for any line taken up quickly
_MEMORY_S, _MEMORY_UNLOCKED_S = 30.0, 1.0  # of how strong the carrier has been
_STAYS_S = 0.4  # seen for so long; a whistle or a burst is not another carrier
_SAME_BINS = 3


class Takeover:
    """The carriers' strength, and the channels under suspicion."""

    def __init__(self, n_channels: int, spectra: LineSpectra, choice: LineChoice) -> None:
        self._spectra, self._choice = spectra, choice
        self._turn = 0
        self._suspect: Counts = np.full(n_channels, -1, np.int64)  # bin of the stronger line; -1: none
        self._strongest: Floats = np.zeros(n_channels)
        self._looks: Counts = np.zeros(n_channels, np.int64)  # in a row at which the suspect was there
        self._looks_needed = int(np.ceil(_STAYS_S / spectra.every_s))

    def start(self, channel: int) -> None:
        """A new carrier: its strength is not known yet."""
        self._suspect[channel] = -1
        self._looks[channel] = 0
        self._strongest[channel] = 0.0

    def look(
        self, samples: ComplexBlock, followed: Bools, locked: Bools, amplitude: Floats, line_hz: Floats
    ) -> list[Found]:
        """Look at the channels whose turn it is, and at those under suspicion; the lines to take up instead.

        samples : the newest ``length``. followed : channels that follow a carrier, of an amplitude and at a frequency.
        locked : those that see it now; what is no longer seen is soon forgotten.
        """
        fall = np.exp(-self._spectra.every_s / np.where(locked, _MEMORY_S, _MEMORY_UNLOCKED_S))
        self._strongest = np.maximum(self._strongest * fall, np.where(locked, amplitude, 0.0))
        self._turn = (self._turn + 1) % _TURNS
        turn = np.arange(len(followed)) % _TURNS == self._turn
        channels = np.flatnonzero(followed & (turn | (self._suspect >= 0)))
        if not len(channels):
            return []
        levels_db = self._spectra.levels_db(samples[channels], 1)
        peak = levels_db[:, 1:-1].argmax(axis=1) + 1
        height_db = levels_db[np.arange(len(channels)), peak]
        needed = _STRONGER * self._spectra.density_of(self._strongest[channels] ** 2)
        place_hz = (peak - self._spectra.half - 1) * self._spectra.bin_hz
        beyond_hz = place_hz - line_hz[channels]
        elsewhere = np.abs(beyond_hz) > _SAME_BINS * self._spectra.bin_hz
        elsewhere &= ~self._choice.in_message(channels, beyond_hz)
        mean_db = levels_db.mean(axis=1)
        stronger = elsewhere & (height_db > 10.0 * np.log10(needed + 1e-37)) & (height_db > mean_db + _CLEAR_DB)
        again = stronger & (np.abs(peak - self._suspect[channels]) <= 1)
        self._suspect[channels] = np.where(stronger, peak, -1)
        self._looks[channels] = np.where(again, self._looks[channels] + 1, 0)
        again &= self._looks[channels] >= self._looks_needed
        found = []
        for i in np.flatnonzero(again):
            place, _ = peak_bins(levels_db[i], int(peak[i]), 1)
            hz = (place - self._spectra.half - 1) * self._spectra.bin_hz
            found.append(Found(int(channels[i]), hz, 0.0, QUICK_COVARIANCE, float(10.0 ** (mean_db[i] / 10.0))))
        return found
