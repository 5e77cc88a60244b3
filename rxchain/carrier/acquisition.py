"""Find the lines worth following in channels that follow none.

Spectra 32 hops long, every 16 hops, are averaged along straight drifts (:mod:`rxchain.carrier.slant_stack`). A strong
carrier has a quick way: a line that stands far out of two spectra running is taken at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.line_choice import LineChoice
from rxchain.carrier.line_fit import fit_line, peak_bins
from rxchain.carrier.line_spectra import LineSpectra
from rxchain.carrier.settings import Recipe
from rxchain.carrier.slant_stack import SlantStack, Stacked
from rxchain.streams import Bools, ComplexBlock, Counts, Floats

_AROUND_HZ = 100.0
_QUICK_FALL_DB = 3.0  # what a quick line may have gained since the spectrum before
_LOG_MEAN_DB = 2.51  # mean power over mean log power of noise: Euler's constant in dB
QUICK_COVARIANCE = (1.0, 0.0, 100.0)  # the drift may be any that is searched for


@dataclass(frozen=True, slots=True)
class Found:
    """A line to take up.

    line_hz, drift_hz_s : its frequency at the newest sample, and its drift.
    covariance : of the two: Hz^2, Hz^2/s, (Hz/s)^2.
    noise_density : noise per hertz about it.
    """

    channel: int
    line_hz: float
    drift_hz_s: float
    covariance: tuple[float, float, float]
    noise_density: float


class Acquisition:
    """Spectra of the channels that search, and the lines found in them."""

    def __init__(self, n_channels: int, spectra: LineSpectra, recipe: Recipe, choice: LineChoice) -> None:
        self._recipe, self._choice = recipe, choice
        self._spectra, self._bin_hz, self._every_s = spectra, spectra.bin_hz, spectra.every_s
        self._stack = SlantStack(
            bins=2 * spectra.half + 1,
            around_bins=max(5, round(_AROUND_HZ / self._bin_hz)),
            drift_bins=recipe.drift_hz_s * recipe.power * self._every_s / self._bin_hz,
            spectra=tuple(length for length, _ in recipe.stacks),
        )
        self._offsets_hz: Floats = self._bin_hz * np.arange(-spectra.half, spectra.half + 1, dtype=np.float64)
        self._kept = max(2, *(spectra for spectra, _ in recipe.stacks))
        self._log = np.zeros((self._kept, n_channels, self._stack.width), np.float32)
        self._newest = 0
        self._seen: Counts = np.zeros(n_channels, np.int64)

    def forget(self, channels: Bools) -> None:
        """Begin the averages anew."""
        self._seen[channels] = 0

    def search(self, samples: ComplexBlock, searching: Bools, free: Bools) -> list[Found]:
        """Take in the newest ``length`` samples, and look for lines.

        searching : channels whose spectra are kept up. free : those of them that may take up a line.
        """
        self._newest = (self._newest - 1) % self._kept
        self._seen[~searching] = 0
        self._seen[searching] += 1
        which = np.flatnonzero(searching)
        if not len(which):
            return []
        self._log[self._newest, which] = self._spectra.levels_db(samples[which], self._stack.margin)
        free_channels = np.flatnonzero(free & searching & (self._seen >= 2))
        quick_db = self._recipe.quick_db
        found = self._quick(free_channels, quick_db) if quick_db is not None and len(free_channels) else {}
        since = self._seen[free_channels] - self._recipe.stacks[0][0]
        due = free_channels[(since >= 0) & (since % self._recipe.stack_every == 0)]
        ready = np.array([channel for channel in due if channel not in found], np.int64)
        if len(ready):
            found |= self._slow(ready)
        return list(found.values())

    def _newest_first(self, channels: Counts, n: int) -> list[NDArray[np.float32]]:
        order = (self._newest + np.arange(n)) % self._kept
        return [self._log[k, channels] for k in order]

    def _quick(self, channels: Counts, quick_db: float) -> dict[int, Found]:
        last, before = self._newest_first(channels, 2)
        margin, bins = self._stack.margin, len(self._offsets_hz)
        searched = last[:, margin : margin + bins]
        peak = searched.argmax(axis=1)
        rows = np.arange(len(channels))
        height = searched[rows, peak]
        near = np.max([before[rows, margin + peak + step] for step in (-1, 0, 1)], axis=0)
        over = height - np.mean(last, axis=1) - _LOG_MEAN_DB
        clear = (over > quick_db) & (near > height - _QUICK_FALL_DB)
        found: dict[int, Found] = {}
        for i in np.flatnonzero(clear):
            place, _ = peak_bins(last[i], margin + int(peak[i]), 1)
            channel, density = int(channels[i]), _density(float(np.mean(last[i])))
            found[channel] = Found(channel, self._line_hz(place), 0.0, QUICK_COVARIANCE, density)
        return found

    def _slow(self, channels: Counts) -> dict[int, Found]:
        longest = int(min(self._kept, self._seen[channels].max()))
        newest_first = self._newest_first(channels, longest)
        stacks = self._stack.stack(newest_first)
        found: dict[int, Found] = {}
        for spectra, contrast_db in self._recipe.stacks:
            if spectra not in stacks:
                continue
            stacked = stacks[spectra]
            passing = (stacked.contrast_db > contrast_db) & (self._seen[channels] >= spectra)[:, None]
            for i in np.flatnonzero(passing.any(axis=1)):
                levels = np.array([spectrum[i] for spectrum in newest_first[:spectra]])
                if int(channels[i]) not in found:
                    found[int(channels[i])] = self._fitted(int(channels[i]), int(i), levels, stacked, contrast_db)
        return found

    def _fitted(
        self, channel: int, row: int, newest_first: NDArray[np.float32], stacked: Stacked, threshold_db: float
    ) -> Found:
        contrast_db, level_db = stacked.contrast_db[row], stacked.level_db[row]
        peak = self._choice.choose(channel, self._offsets_hz, contrast_db, level_db, threshold_db)
        around_db = float(level_db[peak] - contrast_db[peak])
        drift = self._stack.drift_at(newest_first, peak)
        fit = fit_line(
            newest_first, self._stack.margin + peak, drift, self._stack.drift_error(len(newest_first)), around_db
        )
        bin_hz, drift_unit = self._bin_hz, self._bin_hz / self._every_s
        covariance = (
            bin_hz**2 * fit.variance,
            bin_hz * drift_unit * fit.covariance,
            drift_unit**2 * fit.drift_variance,
        )
        line_hz, drift_hz_s = self._line_hz(fit.position_bins), fit.drift_bins * drift_unit
        return Found(channel, line_hz, drift_hz_s, covariance, _density(around_db))

    def _line_hz(self, place: float) -> float:
        return (place - self._stack.width // 2) * self._bin_hz


def _density(mean_log_db: float) -> float:
    return float(10.0 ** ((mean_log_db + _LOG_MEAN_DB) / 10.0))
