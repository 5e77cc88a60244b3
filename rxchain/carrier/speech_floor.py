"""How far each bin stands above its own floor: steady tones, hum and the passband's shape go, the voice stays.

The floor is the minimum of the lightly smoothed power over about two seconds, as in R. Martin, "Noise power spectral
density estimation based on optimal smoothing and minimum statistics", IEEE Trans. Speech Audio Process. 9 (2001)
504-512, without its optimal smoothing.
"""

from __future__ import annotations

import numpy as np

from rxchain.streams import FloatBlock

_PIECE_FRAMES = 13  # the minimum is taken over the last four pieces of 0.4 s
_PIECES = 4
_SMOOTHING = 0.5
_BIAS = 2.0  # the mean over the minimum
_ABOVE = 4.0  # a bin counts from about so many times the floor
_DEPTH = 1e-3  # the floor lies at most 30 dB under the level: what is weaker is masked by the window's skirts
_LEVEL_GAIN = 0.02
_LEVEL_ATTACK = 0.3  # of a louder frame's power, at once
_TINY = 1e-20


class SpeechFloor:
    """Follows the floor of every bin of every channel."""

    def __init__(self) -> None:
        self._frames = 0

    def excess(self, power: FloatBlock) -> FloatBlock:
        """``log(1 + power / (4 floor))`` of a frame's power, (channels, bins)."""
        mean = power.mean(axis=1, keepdims=True) + _TINY
        if self._frames == 0:
            self._smoothed, self._level = power.copy(), mean
            self._minima = np.repeat(power[None], _PIECES, axis=0)
        self._smoothed += _SMOOTHING * (power - self._smoothed)
        self._level = np.maximum(self._level + _LEVEL_GAIN * (mean - self._level), _LEVEL_ATTACK * mean)
        piece = self._minima[self._frames // _PIECE_FRAMES % _PIECES]
        if self._frames % _PIECE_FRAMES == 0:
            piece[...] = self._smoothed
        np.minimum(piece, self._smoothed, out=piece)
        self._frames += 1
        floor = np.maximum(_BIAS * self._minima.min(axis=0), _DEPTH * self._level)
        return np.asarray(np.log1p(power / (_ABOVE * floor)))
