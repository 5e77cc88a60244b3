"""Find the lines worth following in channels that follow none.

Spectra 32 hops long, every 16 hops, are averaged along straight drifts (:mod:`rxchain.carrier.slant_stack`). A strong
carrier has a quick way: a line that stands far out of two spectra running is taken at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.carrier.block_sums import hann
from rxchain.carrier.line_choice import LineChoice
from rxchain.carrier.settings import Recipe
from rxchain.carrier.slant_stack import SlantStack
from rxchain.streams import Bools, ComplexBlock, Counts, Floats

SPECTRUM_HOPS = 32
EVERY_HOPS = 16
_FINE_SIZE = 512
_AROUND_HZ = 100.0
_QUICK_FALL_DB = 3.0  # what a quick line may have gained since the spectrum before
_LOG_MEAN_DB = 2.51  # mean power over mean log power of noise: Euler's constant in dB
_FLOOR = np.float32(1e-37)


@dataclass(frozen=True, slots=True)
class Found:
    """A line taken up: its frequency at the newest sample, its drift, and the noise per hertz about it."""

    channel: int
    line_hz: float
    drift_hz_s: float
    noise_density: float


def residual_hz(blocks: ComplexBlock, hop_s: float) -> float:
    """Frequency, within a spectrum's bin of zero, of a line whose block sums ``(hops,)`` were turned by what is known.

    The peak of their spectrum: the maximum-likelihood estimate (D. C. Rife and R. R. Boorstyn, "Single-tone parameter
    estimation from discrete-time observations", IEEE Trans. IT-20, 1974).
    """
    size = _FINE_SIZE
    power = np.abs(np.fft.fft(blocks, size)) ** 2
    reach = int(np.ceil(size / SPECTRUM_HOPS))
    k = np.arange(-reach, reach + 1)
    near = power[k]
    peak = int(np.argmax(near[1:-1])) + 1
    left, top, right = (float(v) for v in near[peak - 1 : peak + 2])
    bend = left - 2.0 * top + right
    step = float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend < 0.0 else 0.0
    return (float(k[peak]) + step) / (size * hop_s)


class Acquisition:
    """Spectra of the channels that search, and the lines found in them."""

    def __init__(self, n_channels: int, rate_hz: float, hop_samples: int, recipe: Recipe, choice: LineChoice) -> None:
        self._recipe, self._choice = recipe, choice
        self.length = SPECTRUM_HOPS * hop_samples
        self._bin_hz = rate_hz / self.length
        self._every_s = EVERY_HOPS * hop_samples / rate_hz
        search_hz = min(choice.search_hz, 0.5 * rate_hz)
        half = min(round(search_hz / self._bin_hz), self.length // 2 - 1)
        self._stack = SlantStack(
            bins=2 * half + 1,
            around_bins=max(5, round(_AROUND_HZ / self._bin_hz)),
            drift_bins=recipe.drift_hz_s * recipe.power * self._every_s / self._bin_hz,
            spectra=tuple(spectra for spectra, _ in recipe.stacks),
        )
        self._offsets_hz: Floats = self._bin_hz * np.arange(-half, half + 1, dtype=np.float64)
        reach = half + self._stack.margin
        self._taken = np.arange(-reach, reach + 1) % self.length
        window = hann(self.length)
        self._window = (window / np.sqrt(np.sum(window**2) * rate_hz)).astype(np.float32)
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
        spectrum = np.asarray(scipy.fft.fft(samples[which] * self._window, axis=1))[:, self._taken]
        power = spectrum.real**2 + spectrum.imag**2
        self._log[self._newest, which] = np.float32(10.0) * np.log10(power + _FLOOR)
        free_channels = np.flatnonzero(free & searching & (self._seen >= 2))
        quick_db = self._recipe.quick_db
        found = self._quick(free_channels, quick_db) if quick_db is not None and len(free_channels) else {}
        shortest = self._recipe.stacks[0][0]
        ready = np.array([c for c in free_channels if self._seen[c] >= shortest and c not in found], np.int64)
        if len(ready):
            found |= self._slow(ready)
        return list(found.values())

    def _spectra(self, channels: Counts, n: int) -> list[NDArray[np.float32]]:
        order = (self._newest + np.arange(n)) % self._kept
        return [self._log[k, channels] for k in order]

    def _quick(self, channels: Counts, quick_db: float) -> dict[int, Found]:
        last, before = self._spectra(channels, 2)
        margin, bins = self._stack.margin, len(self._offsets_hz)
        searched = last[:, margin : margin + bins]
        peak = searched.argmax(axis=1)
        rows = np.arange(len(channels))
        height = searched[rows, peak]
        near = np.max([before[rows, margin + peak + step] for step in (-1, 0, 1)], axis=0)
        over = height - np.mean(last, axis=1) - _LOG_MEAN_DB
        clear = (over > quick_db) & (near > height - _QUICK_FALL_DB)
        return {
            int(channels[i]): self._found(int(channels[i]), int(peak[i]), 0.0, float(np.mean(last[i])))
            for i in np.flatnonzero(clear)
        }

    def _slow(self, channels: Counts) -> dict[int, Found]:
        longest = int(min(self._kept, self._seen[channels].max()))
        stacks = self._stack.stack(self._spectra(channels, longest))
        found: dict[int, Found] = {}
        for spectra, contrast_db in self._recipe.stacks:
            if spectra not in stacks:
                continue
            stacked = stacks[spectra]
            enough = self._seen[channels] >= spectra
            passing = (stacked.contrast_db > contrast_db) & enough[:, None]
            for i in np.flatnonzero(passing.any(axis=1)):
                channel = int(channels[i])
                peak = self._choice.choose(
                    channel, self._offsets_hz, stacked.contrast_db[i], stacked.level_db[i], contrast_db
                )
                around_db = float(stacked.level_db[i, peak] - stacked.contrast_db[i, peak])
                drift_hz_s = float(stacked.drift_bins[i, peak]) * self._bin_hz / self._every_s
                found.setdefault(channel, self._found(channel, peak, drift_hz_s, around_db))
        return found

    def _found(self, channel: int, peak: int, drift_hz_s: float, around_db: float) -> Found:
        """Refined on the last spectrum: an average is as old as it is long."""
        middle = self._stack.margin + peak
        nearby = self._log[self._newest, channel, middle - 1 : middle + 2]
        middle += int(np.argmax(nearby)) - 1
        left, top, right = (float(v) for v in self._log[self._newest, channel, middle - 1 : middle + 2])
        bend = left - 2.0 * top + right
        step = float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend < 0.0 else 0.0
        line_hz = (middle + step - len(self._taken) // 2) * self._bin_hz + drift_hz_s * self._every_s
        density = 10.0 ** ((around_db + _LOG_MEAN_DB) / 10.0)
        return Found(channel, line_hz, drift_hz_s, density)
