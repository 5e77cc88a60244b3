"""A limiter that looks ahead: no sample ever passes the ceiling, and the gain that sees to it is smooth.

What each sample is over the ceiling, in decibels, is looked for over the look-ahead, released at a steady rate, and the
gain that takes it away is averaged over a raised-cosine window as long as the look-ahead. Every gain in the average was
chosen knowing the sample it is applied to, so the average cannot let it pass: a step in level does not overshoot.
"""

from __future__ import annotations

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.kernels.overlap_save import WindowedStage
from rxchain.streams import FloatBlock, Floats

LOOK_AHEAD_S = 3e-3
_RELEASE_DB_S = 40.0


class Limiter(WindowedStage[np.float32]):
    """Keeps a group of channels at or under a ceiling; the messages of one channel share its gain.

    process(audio) : float32, (channels, messages, n). Returns the same, unchanged (but for rounding) where it has been
        under the ceiling for a while. What is no number comes out as silence. hop : samples worked on at a time.
    """

    def __init__(self, n_channels: int, n_messages: int, rate_hz: float, ceiling_dbfs: float, hop: int) -> None:
        self._ceiling = 10.0 ** (ceiling_dbfs / 20.0)
        self._look = look = max(2, round(LOOK_AHEAD_S * rate_hz))
        # Held by the release, the reduction falls by so much from one sample to the next.
        self._fall_db = _RELEASE_DB_S / rate_hz * np.arange(1, hop + 1)
        hann = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(1, look + 1) / (look + 1))
        self._hann: Floats = hann / hann.sum()
        shape = n_channels, n_messages
        self._set_up(shape, np.float32, 0, hop, look - 1, shape)

    def reset(self) -> None:
        """As new, with the same settings."""
        super().reset()
        n_channels, n_messages = self._input_shape
        kept = self._look - 1
        self._audio = np.zeros((n_channels, n_messages, kept), np.float32)
        self._over_db: Floats = np.zeros((n_channels, kept))
        self._gains: Floats = np.ones((n_channels, kept))
        self._held_db: Floats = np.zeros((n_channels, 1))

    @property
    def reduction_db(self) -> Floats:
        """How much the gain is lowered at the newest sample, (channels,)."""
        return self._held_db[:, 0]

    def _advance(self, window: FloatBlock) -> FloatBlock:
        window = np.nan_to_num(window, nan=0.0, posinf=0.0, neginf=0.0)
        hop = window.shape[2]
        peak = np.abs(window).max(axis=1).astype(np.float64)
        self._over_db = np.concatenate([self._over_db, 20.0 * np.log10(np.maximum(peak / self._ceiling, 1.0))], axis=1)
        ahead_db = sliding_window_view(self._over_db, self._look, axis=1).max(axis=2)
        self._over_db = self._over_db[:, hop:]
        # A steady release is a running maximum of the levels plus the slope.
        held_db = np.maximum.accumulate(np.maximum(ahead_db + self._fall_db, self._held_db), axis=1) - self._fall_db
        held_db = np.maximum(held_db, 0.0)
        self._held_db = held_db[:, -1:]
        self._gains = np.concatenate([self._gains, 10.0 ** (-held_db / 20.0)], axis=1)
        gain = (sliding_window_view(self._gains, self._look, axis=1) @ self._hann).astype(np.float32)
        self._gains = self._gains[:, hop:]
        self._audio = np.concatenate([self._audio, window], axis=2)
        limited: FloatBlock = self._audio[:, :, :hop] * gain[:, None]
        self._audio = self._audio[:, :, hop:]
        return limited
