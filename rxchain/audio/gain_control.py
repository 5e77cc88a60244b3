"""Automatic gain control that looks ahead: the peak never passes the target, and the gain is smooth.

Peaks of 1 ms pieces, in decibels, are held for a moment and then released at a steady rate; the gain that brings each
held peak to the target is averaged over a raised-cosine window that lies wholly within the look-ahead, so at no sample
does it exceed what the loudest peak allows: a step in level does not overshoot, however high.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rxchain.kernels.overlap_save import WindowedStage
from rxchain.streams import FloatBlock, Floats

_PIECE_S = 1e-3
_QUANTUM = 64  # pieces worked on at a time; 8 where delay matters, which changes nothing but the cost
_LIVE_QUANTUM = 8
_SMOOTH = 8  # half-length of the averaging window, pieces
_AHEAD = _SMOOTH + 1  # the peak search reaches this far on either side: the window, and the slope between two pieces
_LOOK = _AHEAD + _SMOOTH + 1  # pieces that must be known after the one whose gain is wanted
_FLOOR_DB = -200.0


@dataclass(frozen=True, slots=True)
class GainSettings:
    """target_dbfs : peak level aimed at. release_db_s : how fast gain comes back. highest_db : gain for silence."""

    target_dbfs: float = -6.0
    release_db_s: float = 20.0
    highest_db: float = 80.0


class GainControl(WindowedStage[np.float32]):
    """Automatic gain for a group of channels; the messages of one channel share its gain.

    process(audio) : float32, (channels, messages, n). Returns the same, levelled; peaks stay at or under the target.
    fixed_db : (channels,): gain of the channels that have a fixed one, nan for those whose gain is automatic.
    gain_db : float64, (channels,): the gain applied to the latest samples.
    """

    def __init__(
        self, settings: GainSettings, fixed_db: Floats, n_messages: int, rate_hz: float, live: bool = False
    ) -> None:
        n_channels = len(fixed_db)
        self._fixed = np.isfinite(fixed_db)
        self._fixed_gain = (10.0 ** (np.where(self._fixed, fixed_db, 0.0) / 20.0)).astype(np.float32)
        self._settings = settings
        self._quantum = _LIVE_QUANTUM if live else _QUANTUM
        self._piece = n = max(1, round(_PIECE_S * rate_hz))
        self._release_db = settings.release_db_s * n / rate_hz
        hann = 0.5 - 0.5 * np.cos(2 * np.pi * (np.arange(2 * _SMOOTH + 1) + 1) / (2 * _SMOOTH + 2))
        self._hann = hann / hann.sum()
        shape = n_channels, n_messages
        self._set_up(shape, np.float32, 0, self._quantum * n, _LOOK * n, shape)

    def reset(self) -> None:
        """As new, with the same settings."""
        super().reset()
        n_channels, n_messages = self._input_shape
        highest_db = self._settings.highest_db
        self._audio = np.zeros((n_channels, n_messages, _LOOK * self._piece), np.float32)
        self._peaks_db: Floats = np.full((n_channels, 2 * _AHEAD), _FLOOR_DB)
        self._gains: Floats = np.full((n_channels, 2 * _SMOOTH + 1), highest_db)
        self._held = np.full(n_channels, -np.inf)
        start = np.float32(10.0 ** (highest_db / 20.0))
        self._last = np.where(self._fixed, self._fixed_gain, start)
        self._pieces = 0
        self.gain_db: Floats = np.full(n_channels, highest_db)

    def _advance(self, window: FloatBlock) -> FloatBlock:
        settings, n = self._settings, self._piece
        n_channels = self._input_shape[0]
        amplitude = _piece_peaks(np.abs(window), n)
        # A piece that is no number, or infinite, would be held for ever.
        amplitude[~np.isfinite(amplitude)] = 0.0
        peaks_db = 20.0 * np.log10(np.maximum(amplitude.astype(np.float64), 1e-10))
        self._peaks_db = np.concatenate([self._peaks_db, peaks_db], axis=1)
        highest = _sliding_maximum(self._peaks_db, 2 * _AHEAD + 1)
        self._peaks_db = self._peaks_db[:, self._quantum :]
        # A release of so many decibels a piece is a running maximum of the levels plus the slope.
        slope = self._release_db * (self._pieces + np.arange(self._quantum))
        held = np.maximum.accumulate(np.maximum(highest + slope, self._held[:, None]), axis=1)
        self._held = held[:, -1]
        self._pieces += self._quantum
        gain_db = np.minimum(settings.target_dbfs - (held - slope), settings.highest_db)
        self._gains = np.concatenate([self._gains, gain_db], axis=1)
        linear = 10.0 ** (self._gains / 20.0)
        smooth = np.zeros((n_channels, self._quantum))
        for k, weight in enumerate(self._hann, 1):
            smooth += weight * linear[:, k : k + self._quantum]
        smooth = smooth.astype(np.float32)
        smooth = np.where(self._fixed[:, None], self._fixed_gain[:, None], smooth)
        self._gains = self._gains[:, self._quantum :]
        before = np.concatenate([self._last[:, None], smooth[:, :-1]], axis=1)
        self._last = smooth[:, -1]
        self.gain_db = 20.0 * np.log10(smooth[:, -1])
        rise = ((np.arange(n) + 0.5) / n).astype(np.float32)
        gain = (before[:, :, None] + (smooth - before)[:, :, None] * rise).reshape(n_channels, 1, -1)
        self._audio = np.concatenate([self._audio, window], axis=2)
        levelled: FloatBlock = self._audio[:, :, : self._quantum * n] * gain
        self._audio = self._audio[:, :, self._quantum * n :]
        return levelled


def _piece_peaks(amplitude: FloatBlock, piece: int) -> FloatBlock:
    """Largest value of each piece over all messages, (channels, pieces)."""
    peaks = amplitude[:, :, ::piece].copy()
    for k in range(1, piece):  # a reduction over a short last axis is several times slower
        np.maximum(peaks, amplitude[:, :, k::piece], out=peaks)
    return np.asarray(peaks.max(axis=1))


def _sliding_maximum(values: Floats, width: int) -> Floats:
    """Largest of each ``width`` neighbours, (channels, n - width + 1), by doubling the reach."""
    reach = 1
    while reach < width:
        step = min(reach, width - reach)
        values = np.maximum(values[:, :-step], values[:, step:])
        reach += step
    return values
