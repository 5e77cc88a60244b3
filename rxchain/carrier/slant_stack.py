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
    """The best drift for each bin.

    contrast_db : float32, (channels, bins): level over the mean of the surroundings.
    level_db : float32, (channels, bins): mean of the log spectra along the drift.
    drift_bins : float32, (channels, bins): bins a spectrum along the drift.
    """

    contrast_db: NDArray[np.float32]
    level_db: NDArray[np.float32]
    drift_bins: NDArray[np.float32]


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
        self._reach = int(np.abs(self._shifts).max())
        self.margin = self._around + self._reach
        self.width = bins + 2 * self.margin

    def drift_error(self, spectra: int) -> float:
        """One standard deviation of a drift found in so many spectra, bins a spectrum: a third of the 3 dB width."""
        return _STEP_BINS / spectra

    def stack(self, newest_first: list[NDArray[np.float32]]) -> dict[int, Stacked]:
        """Stacks by their length; spectra in dB, ``(channels, width)``, with the margin to each side."""
        n_channels = newest_first[0].shape[0]
        results: dict[int, Stacked] = {}
        for drift, shifts in zip(self._drifts, self._shifts, strict=True):
            total = np.zeros((n_channels, self._bins + 2 * self._around), np.float32)
            for age, (spectrum, shift) in enumerate(zip(newest_first, shifts, strict=False), 1):
                start = self._reach + shift
                total += spectrum[:, start : start + total.shape[1]]
                if age in self._spectra:
                    results[age] = self._better(results.get(age), total / np.float32(age), float(drift))
        return results

    def _better(self, best: Stacked | None, mean_db: NDArray[np.float32], drift: float) -> Stacked:
        level_db = mean_db[:, self._around : self._around + self._bins]
        contrast_db = level_db - self._surroundings(mean_db)
        if best is None:
            return Stacked(contrast_db, level_db.copy(), np.full(level_db.shape, drift, np.float32))
        better = contrast_db > best.contrast_db
        np.copyto(best.contrast_db, contrast_db, where=better)
        np.copyto(best.level_db, level_db, where=better)
        np.copyto(best.drift_bins, np.float32(drift), where=better)
        return best

    def _surroundings(self, level_db: NDArray[np.float32]) -> NDArray[np.float32]:
        total = np.cumsum(level_db, axis=1, dtype=np.float32)
        total = np.concatenate([np.zeros_like(total[:, :1]), total], axis=1)
        wide, narrow = 2 * self._around + 1, 2 * _LEFT_OUT_BINS + 1
        offset = self._around - _LEFT_OUT_BINS
        inner = total[:, offset : offset + self._bins + narrow]
        around = (total[:, wide:] - total[:, :-wide]) - (inner[:, narrow:] - inner[:, :-narrow])
        mean_db: NDArray[np.float32] = (around / np.float32(wide - narrow)).astype(np.float32)
        return mean_db
