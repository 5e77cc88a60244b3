"""A channel goes from one group to another without a click and without losing a sample.

Both groups run side by side until the new one has found its carrier and its gain; then the audio is cross-faded, at a
sample index settled in advance.
"""

from __future__ import annotations

import numpy as np

from rxchain.streams import FloatBlock

FADE_S = 0.03


class Handover:
    """Joins what the old group delivers up to sample ``at`` with what the new one delivers from there.

    old_index, new_index : index of the first sample that either will deliver next, at the audio's rate. at : where the
    fade begins. fade : its length in samples.
    """

    def __init__(self, old_index: int, new_index: int, at: int, fade: int) -> None:
        self.at = max(at, old_index, new_index)
        self._fade = fade
        self._old_index, self._new_index = old_index, new_index
        self._old: list[FloatBlock] = []
        self._new: list[FloatBlock] = []
        self.is_over = False

    def from_old(self, audio: FloatBlock) -> list[FloatBlock]:
        """Takes what the old group made; returns what can be delivered, (messages, n) each."""
        first = self._old_index
        self._old_index += audio.shape[1]
        now = audio[:, : max(0, self.at - first)]
        self._old.append(audio[:, max(0, self.at - first) :])
        return [piece for piece in (now, *self._faded()) if piece.shape[1]]

    def from_new(self, audio: FloatBlock) -> list[FloatBlock]:
        """Takes what the new group made; returns what can be delivered, in the new group's number of messages."""
        first = self._new_index
        self._new_index += audio.shape[1]
        self._new.append(audio[:, max(0, self.at - first) :])
        return [piece for piece in self._faded() if piece.shape[1]]

    def _faded(self) -> list[FloatBlock]:
        """The fade and all of the new that follows it, once both reach so far."""
        end = self.at + self._fade
        if self.is_over or self._old_index < end or self._new_index < end:
            return []
        self.is_over = True
        new = np.concatenate(self._new, axis=1)
        old = _in_layout(np.concatenate(self._old, axis=1)[:, : self._fade], len(new))
        rise = (0.5 - 0.5 * np.cos(np.pi * (np.arange(self._fade) + 0.5) / self._fade)).astype(np.float32)
        return [old * (1 - rise) + new[:, : self._fade] * rise, new[:, self._fade :]]

    def finish(self) -> list[FloatBlock]:
        """What is left where the stream ends before the fade: the old group's audio."""
        if self.is_over:
            return []
        self.is_over = True
        return [piece for piece in self._old if piece.shape[1]]


def _in_layout(audio: FloatBlock, n_messages: int) -> FloatBlock:
    """The audio in another number of messages: one is heard on both, two become their mean."""
    if len(audio) == n_messages:
        return audio
    return np.repeat(audio.mean(axis=0, keepdims=True), n_messages, axis=0)
