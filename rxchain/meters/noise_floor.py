"""The density of a channel's noise, from the quietest of its time-frequency cells.

Cells that hold noise alone are the lowest population of the channel's short-time spectrum: pauses, gaps between
harmonics, and what lies beside the emission. Their level is a truncated mean: the mean of the cells below the estimate
itself, over what that mean would be for noise alone (a gamma law), iterated from below. Cells are kept as counts over
levels a quarter of a decibel apart, so that a window of seconds costs no sorting.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainc

from rxchain.streams import Bools, Floats

_CELL_FRAMES, _CELL_BINS = 4, 8
_LOWEST_DB, _STEP_DB, _LEVELS = -230.0, 0.25, 960
_ROUNDS = 40
_START = 0.05  # share of the cells from which the estimate starts
_WINDOW_CHUNKS = 20  # about 5 s
# Averages that a cell's 32 values are worth: Hann frames overlap by half, and neighbouring bins share their noise.
_AVERAGES = (
    _CELL_FRAMES * _CELL_BINS / ((1 + 2 * (4 / 9) * (7 / 8) + 2 * (1 / 36) * (6 / 8)) * (1 + 2 * (1 / 36) * (3 / 4)))
)
_MEAN_BELOW = float(gammainc(_AVERAGES + 1, _AVERAGES) / gammainc(_AVERAGES, _AVERAGES))
_SHARE_BELOW = float(gammainc(_AVERAGES, _AVERAGES))
LEAST_NOISE_SHARE = 0.04  # with fewer cells of noise than this the estimate is no measurement


class NoiseFloor:
    """Noise density of a group of channels over the last seconds.

    density : float64, (channels,), full scale squared per hertz; nan before the first estimate.
    relative_error : one standard deviation over the density. noise_share : share of the cells that hold noise alone.
    """

    def __init__(self, n_channels: int, frame: int, rate_hz: float, usable_hz: float) -> None:
        frequency_hz = np.fft.fftfreq(frame, 1.0 / rate_hz)
        inside = np.flatnonzero(np.abs(frequency_hz) <= usable_hz - 1.5 * rate_hz / frame)
        order = inside[np.argsort(frequency_hz[inside])]
        self._bins = order[: len(order) // _CELL_BINS * _CELL_BINS]
        self._counts = np.zeros((_WINDOW_CHUNKS, n_channels, _LEVELS), np.float32)
        self._total = np.zeros((n_channels, _LEVELS))
        self._chunks = 0
        self._levels = 10.0 ** ((_LOWEST_DB + _STEP_DB * (np.arange(_LEVELS) + 0.5)) / 10.0)
        self.density: Floats = np.full(n_channels, np.nan)
        self.relative_error: Floats = np.full(n_channels, np.nan)
        self.noise_share: Floats = np.zeros(n_channels)

    def add(self, density: NDArray[np.float32], valid: Bools) -> None:
        """A chunk's densities, (channels, frames, bins); chunks that are not ``valid`` (channels,) leave no cells."""
        n_channels, n_rows = len(density), density.shape[1] // _CELL_FRAMES
        cells = density[:, -n_rows * _CELL_FRAMES :, self._bins].reshape(
            n_channels, n_rows, _CELL_FRAMES, len(self._bins) // _CELL_BINS, _CELL_BINS
        )
        level_db = 10.0 * np.log10(cells.mean(axis=(2, 4)).reshape(n_channels, -1) + 1e-30)
        level = np.clip(((level_db - _LOWEST_DB) / _STEP_DB).astype(np.int64), 0, _LEVELS - 1)
        flat = (level + _LEVELS * np.arange(n_channels)[:, None])[valid]
        counts = np.bincount(flat.ravel(), minlength=n_channels * _LEVELS).reshape(n_channels, _LEVELS)
        slot = self._counts[self._chunks % _WINDOW_CHUNKS]
        self._total += counts - slot
        slot[:] = counts
        self._chunks += 1

    def estimate(self) -> None:
        """Brings the estimate up to date with the chunks of the window."""
        number = np.cumsum(self._total, axis=1)
        power = np.cumsum(self._total * self._levels, axis=1)
        cells = number[:, -1]
        rows = np.arange(len(cells))
        first = np.argmax(number >= _START * cells[:, None], axis=1)
        estimate = self._levels[first]
        below = np.zeros(len(cells))
        for _ in range(_ROUNDS):
            place = np.clip((10.0 * np.log10(estimate) - _LOWEST_DB) / _STEP_DB, 1.0, _LEVELS - 1.0)
            whole = place.astype(np.int64)
            part = place - whole
            # Cells below the estimate: all lower levels, and a share of the one it lies in.
            below = number[rows, whole - 1] + part * (number[rows, whole] - number[rows, whole - 1])
            energy = power[rows, whole - 1] + part * (power[rows, whole] - power[rows, whole - 1])
            mean = np.where(below > 0, energy / np.maximum(below, 1e-9), estimate)
            estimate = 0.5 * estimate + 0.5 * mean / _MEAN_BELOW
        with np.errstate(invalid="ignore", divide="ignore"):
            share = np.clip(below / np.maximum(cells, 1.0) / _SHARE_BELOW, 0.0, 1.0)
            error = np.sqrt(4.0 / (_AVERAGES * np.maximum(below, 1.0)) + (0.23 * (0.02 + 0.1 * (1.0 - share))) ** 2)
        known = cells > 0
        self.noise_share = np.where(known, share, 0.0)
        self.density = np.where(known, estimate, np.nan)
        self.relative_error = np.where(known, error, np.nan)
