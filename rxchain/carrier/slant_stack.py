"""Average log spectra along straight drifts: a line that moves adds up as well as one that stands still.

The slant stack is the seismologist's (P. S. Schultz and J. F. Claerbout, "Velocity estimation and downward
continuation by wavefront synthesis", Geophysics 43, 1978), applied to spectra over time. Averaging logarithms keeps a
short loud sound from passing for a line.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_STEP_BINS = 0.8  # neighbouring drifts differ by so much over the whole stack
_LEFT_OUT_BINS = 3  # to each side of a line: the main lobe of a Hann window


@dataclass(frozen=True, slots=True)
class Stacked:
    """The best that any drift makes of each bin.

    contrast_db : float32, (channels, bins): level over the mean of the surroundings.
    level_db : float32, (channels, bins): mean of the log spectra along the drift.
    """

    contrast_db: NDArray[np.float32]
    level_db: NDArray[np.float32]


class SlantStack:
    """Stacks of the newest spectra of a history, for several lengths at once."""

    def __init__(self, bins: int, around_bins: int, drift_bins: float, spectra: tuple[int, ...]) -> None:
        self._bins, self._around = bins, around_bins
        self._spectra = tuple(sorted(spectra))
        longest = self._spectra[-1]
        steps = int(np.ceil(drift_bins * longest / _STEP_BINS))
        self._drifts = np.linspace(-drift_bins, drift_bins, 2 * steps + 1) if steps else np.zeros(1)
        # Where a line was so many spectra ago.
        self._shifts = np.rint(-self._drifts[:, None] * np.arange(longest)).astype(int)
        self.margin = max(self._around, int(np.abs(self._shifts).max()))
        self.width = bins + 2 * self.margin

    def stack(self, newest_first: list[NDArray[np.float32]]) -> dict[int, Stacked]:
        """Stacks by their length; spectra in dB, ``(channels, width)``, with the margin to each side."""
        lengths = [spectra for spectra in self._spectra if spectra <= len(newest_first)]
        best: dict[int, NDArray[np.float32]] = {}
        for shifts in self._shifts:
            starts = self.margin + shifts
            total = newest_first[0][:, starts[0] : starts[0] + self._bins].copy()
            for age in range(1, lengths[-1] + 1):
                if age in lengths:
                    best[age] = np.maximum(best[age], total) if age in best else total.copy()
                if age < lengths[-1]:
                    total += newest_first[age][:, starts[age] : starts[age] + self._bins]
        level = {spectra: best[spectra] / np.float32(spectra) for spectra in lengths}
        return {
            spectra: Stacked(level_db - self._surroundings(newest_first[:spectra]), level_db)
            for spectra, level_db in level.items()
        }

    def drift_at(self, newest_first: NDArray[np.float32], bin_index: int) -> float:
        """Drift, in bins a spectrum, of the line that ends in a searched bin; spectra of one channel."""
        ages = np.arange(len(newest_first))
        along = newest_first[ages, self.margin + bin_index + self._shifts[:, : len(newest_first)]]
        return float(self._drifts[np.argmax(along.mean(axis=1))])

    def drift_error(self, spectra: int) -> float:
        """One standard deviation of a drift found in so many spectra, bins a spectrum: a third of the 3 dB width."""
        return _STEP_BINS / spectra

    def _surroundings(self, spectra: list[NDArray[np.float32]]) -> NDArray[np.float32]:
        total = np.cumsum(np.mean(spectra, axis=0), axis=1, dtype=np.float32)
        total = np.pad(total, ((0, 0), (1, 0)))
        wide, narrow = 2 * self._around + 1, 2 * _LEFT_OUT_BINS + 1
        outer = total[:, self.margin - self._around :]
        inner = total[:, self.margin - _LEFT_OUT_BINS :]
        n = self._bins
        around = outer[:, wide : wide + n] - outer[:, :n] - inner[:, narrow : narrow + n] + inner[:, :n]
        mean_db: NDArray[np.float32] = (around / np.float32(wide - narrow)).astype(np.float32)
        return mean_db
