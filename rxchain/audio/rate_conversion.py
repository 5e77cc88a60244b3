"""Audio from a channel's own rate to the whole number of samples a second that files and sound outputs want.

Needed only where the capture's rate is no small ratio of 12 kHz. Each output sample is the convolution of the input
with a windowed sinc placed at its exact instant (interpolated between closely spaced copies of it), so any ratio works
and nothing accumulates.
"""

from __future__ import annotations

import numpy as np

from rxchain.kernels.sinc_interpolation import SincInterpolator
from rxchain.streams import FloatBlock

_HALF = 32  # taps on either side
_QUANTUM = 256


class RateConverter:
    """Converts a group's audio from ``rate_in_hz`` to ``rate_out_hz`` (not much lower: no more than a factor of two).

    process(audio) : float32, (channels, messages, n). Returns float32, (channels, messages, m): output sample j is the
        instant j / rate_out after the first input sample.
    """

    def __init__(self, n_channels: int, n_messages: int, rate_in_hz: float, rate_out_hz: float) -> None:
        self._shape = n_channels, n_messages
        self._step = rate_in_hz / rate_out_hz
        self._sinc = SincInterpolator(self._step, _HALF)
        self.reset()

    @property
    def delay_samples(self) -> int:
        """How far the output runs behind while streaming, apart from the wait for a quantum."""
        return int(np.ceil(_HALF / self._step))

    def reset(self) -> None:
        """As new, with the same rates."""
        self._kept = np.zeros((*self._shape, _HALF - 1), np.float32)
        self._first = -(_HALF - 1)  # index of the first kept sample
        self._made = 0
        self._received = 0

    def process(self, audio: FloatBlock) -> FloatBlock:
        """The output as far as it is complete, whole quanta of it."""
        self._received += audio.shape[2]
        self._kept = np.concatenate([self._kept, audio], axis=2)
        made = [np.zeros((*self._shape, 0), np.float32)]
        while self._kept.shape[2] + self._first > np.floor((self._made + _QUANTUM) * self._step) + _HALF:
            made.append(self._convert())
        return np.concatenate(made, axis=2)

    def flush(self) -> FloatBlock:
        """The rest, as if silence followed: an output for each of its periods begun in the input."""
        wanted = int(np.ceil(self._received / self._step)) - self._made
        received = self._received
        tail = np.zeros((*self._shape, 0), np.float32)
        while tail.shape[2] < wanted:
            tail = np.concatenate([tail, self.process(np.zeros((*self._shape, _QUANTUM), np.float32))], axis=2)
        self._received = received
        return tail[:, :, : max(0, wanted)]

    def _convert(self) -> FloatBlock:
        position = (self._made + np.arange(_QUANTUM)) * self._step
        output = self._sinc.at(self._kept, self._first, position)
        self._made += _QUANTUM
        spent = int(np.floor(self._made * self._step)) - (_HALF - 1) - self._first
        self._kept, self._first = self._kept[:, :, spent:], self._first + spent
        return output
