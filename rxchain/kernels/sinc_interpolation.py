"""A band-limited signal between its samples: a windowed sinc placed at the exact instant wanted.

The taps are interpolated between closely spaced copies of the sinc (J. O.
Smith and P. Gossett, "A flexible sampling-rate conversion method", Proc. IEEE ICASSP 1984, 112-115).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.kernels.fir import kaiser_beta
from rxchain.streams import FloatBlock

_PHASES = 512
_STOP_DB = 90.0


class SincInterpolator:
    """Values between samples, for output rates down to ``1 / step`` of the input's: what would alias is filtered out.

    step : input samples an output sample, about. half : taps on either side of the instant.
    """

    def __init__(self, step: float, half: int) -> None:
        self.half = half
        cutoff = min(1.0, 1.0 / step) * 0.5
        # Offsets of the taps from the wanted instant, for each phase, and one more to interpolate towards.
        t = np.arange(-half + 1, half + 1) - np.arange(_PHASES + 1)[:, None] / _PHASES
        beta = kaiser_beta(_STOP_DB)
        window = np.i0(beta * np.sqrt(np.maximum(0.0, 1.0 - (t / half) ** 2))) / np.i0(beta)
        self._taps = (2.0 * cutoff * np.sinc(2.0 * cutoff * t) * window).astype(np.float32)
        self._reach = np.arange(-half + 1, half + 1)

    def at(self, samples: FloatBlock, first: int, position: NDArray[np.floating]) -> FloatBlock:
        """The signal at ``position`` (in samples, counted like ``first``, the index of the first sample given).

        samples : float32, (..., n), reaching ``half`` samples beyond the positions on either side.
        Returns float32, (..., positions).
        """
        whole = np.floor(position).astype(np.int64)
        phase = (position - whole) * _PHASES
        index = phase.astype(np.int64)
        blend = (phase - index).astype(np.float32)[:, None]
        taps = self._taps[index] * (1 - blend) + self._taps[index + 1] * blend
        output: FloatBlock = (samples[..., whole[:, None] + self._reach - first] * taps).sum(axis=-1)
        return output
