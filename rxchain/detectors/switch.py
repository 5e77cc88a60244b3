"""One audio from several detectors: whichever is chosen at each step, cross-faded where the choice changes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import FloatBlock

_FADE_S = 0.03


class DetectorSwitch:
    """Mixes the audio of several detectors, all aligned to the same samples.

    process(candidates, choices) : one float32 block ``(channels, messages, n)`` a detector (their lengths may differ:
        the switch waits for the slowest) and the new choices, (channels, steps), indices of detectors. Returns the
        chosen audio; a change is faded over 30 ms, both detectors adding up to one, from the middle of its step on: until
        then a detector that was not running has time to fill its filters.
    """

    def __init__(self, n_channels: int, n_messages: int, n_detectors: int, step_samples: int, rate_hz: float) -> None:
        self._shape = n_channels, n_messages
        self._n_detectors = n_detectors
        fade = min(step_samples, max(1, round(_FADE_S * rate_hz)))
        start = max(0, step_samples // 2 - fade)
        self._rise = np.zeros(step_samples, np.float32)
        self._rise[start : start + fade] = 0.5 - 0.5 * np.cos(np.pi * (np.arange(fade) + 0.5) / fade)
        self._rise[start + fade :] = 1.0
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        self._pending = [np.zeros((*self._shape, 0), np.float32) for _ in range(self._n_detectors)]
        self._weights = np.zeros((self._shape[0], self._n_detectors, 0), np.float32)
        self._last: NDArray[np.int8] | None = None

    def process(self, candidates: list[FloatBlock], choices: NDArray[np.int8]) -> FloatBlock:
        """The chosen audio as far as every detector and the choices reach."""
        self._pending = [np.concatenate(pair, axis=2) for pair in zip(self._pending, candidates, strict=True)]
        detectors = np.arange(self._n_detectors)[:, None]
        weights = [self._weights]
        for choice in choices.T:
            before = choice if self._last is None else self._last
            new = (detectors == choice).T[:, :, None].astype(np.float32)
            old = (detectors == before).T[:, :, None].astype(np.float32)
            weights.append(old + (new - old) * self._rise)
            self._last = choice
        self._weights = np.concatenate(weights, axis=2)
        n = min(self._weights.shape[2], *(audio.shape[2] for audio in self._pending))
        chosen = np.zeros((*self._shape, n), np.float32)
        for k, audio in enumerate(self._pending):
            chosen += audio[:, :, :n] * self._weights[:, k, None, :n]
        self._pending = [audio[:, :, n:] for audio in self._pending]
        self._weights = self._weights[:, :, n:]
        return chosen
