"""Smooth a line's block sums with the width that suits its noise and its motion at the moment.

A bank of raised-cosine windows, from 2 hops to 1.2 s long, reads the block sums ``lag`` hops back. Each window predicts
every hop from the others (its own overlapped hops left out); the mean square of the quadrature that is left over
decides, over a memory of 1 s, how much each width counts. So the width follows C/N0 and motion with no table, and the
smoothing is linear in complex amplitude: no arctangent, no unwrapping, no cycle slips. Leave-out choice of a smoother's
width is cross-validation: M. Stone, J. R. Stat. Soc. B 36, 1974.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Floats

_MEMORY_S = 1.0
_SHARPNESS_S = 0.35  # an excess e of a window's error counts as exp(-e * 0.35 s / hop)
_TINY = np.float32(1e-37)


@dataclass(frozen=True, slots=True)
class Smoothed:
    """A quantum of smoothed block sums, ``lag`` hops back.

    line : complex128, (channels, hops): the line's phasor against the reference it was turned by.
    quadrature : float64, (channels, hops): what each hop has across the phasor the other hops predict.
    noise_share : float64, (channels,): noise power of ``line`` over that of one block sum.
    narrow : complex64, (channels,): the last hop through the bank's second narrowest window, for fast motion.
    present : bool, (channels, hops): whether there was any signal at all in the hop.
    """

    line: NDArray[np.complex128]
    quadrature: Floats
    noise_share: Floats
    narrow: NDArray[np.complex64]
    present: NDArray[np.bool_]


class WindowContest:
    """The bank of windows and the standing of each width in each channel."""

    def __init__(
        self,
        n_channels: int,
        half_lengths: tuple[tuple[int, int], ...],
        lag: int,
        hops: int,
        hop_s: float,
        overlap_correlation: Floats,
    ) -> None:
        span = len(overlap_correlation)
        pairs = [(min(future, lag), past) for future, past in half_lengths]
        past = max(p for _, p in pairs)
        self.length = past + lag + hops
        self._lag, self._hops, self._reach = lag, hops, span - 1
        self._quantum_s = hops * hop_s
        self._gain = 1.0 - (1.0 - hop_s / _MEMORY_S) ** hops
        self._sharpness = _SHARPNESS_S / hop_s
        i = np.arange(-past, lag + 1)
        windows = np.array([_raised_cosine(i, future, back) for future, back in pairs])
        windows /= windows.sum(axis=1, keepdims=True)
        middle = np.abs(i) <= self._reach
        self._middle_weight = windows[:, middle].sum(axis=1)
        self.noise_shares = _noise_shares(windows, overlap_correlation)
        self.narrow_share = float(self.noise_shares[self._narrow_index(pairs)])
        self._narrow = self._narrow_index(pairs)
        self._kernels = _staggered(windows, hops)
        self._middle_kernels = _staggered(windows[:, middle], hops)
        self._n_windows = len(pairs)
        self._error = np.zeros((n_channels, self._n_windows))

    def start(self, channel: int) -> None:
        """A new line: every width stands equal."""
        self._error[channel] = 0.0

    def smooth(self, blocks: NDArray[np.float32], noise: Floats, followed_s: Floats) -> Smoothed:
        """Smooth the newest quantum that has ``lag`` hops after it.

        blocks : float32, (2, channels, length): real and imaginary parts of the block sums, turned by the reference.
        noise : float64, (channels,): noise power of one block sum. followed_s : how long the line has been followed.
        """
        n_channels, shape = blocks.shape[1], (2, blocks.shape[1], self._hops, self._n_windows)
        centre = blocks.shape[2] - self._lag - self._hops
        around = blocks[:, :, centre - self._reach : centre + self._hops + self._reach]
        middle = blocks[:, :, centre : centre + self._hops, None]
        full = np.matmul(blocks, self._kernels).reshape(shape)
        others = full - np.matmul(around, self._middle_kernels).reshape(shape)
        others /= (1.0 - self._middle_weight).astype(np.float32)
        size = np.sqrt(others[0] ** 2 + others[1] ** 2) + _TINY
        across = (middle[1] * others[0] - middle[0] * others[1]) / size
        power = middle[0, :, :, 0].astype(np.float64) ** 2 + middle[1, :, :, 0].astype(np.float64) ** 2
        present = power > 1e-6 * noise[:, None]
        mix = self._compare(across, present, followed_s)
        weights = mix.astype(np.float32)[:, :, None]
        parts = np.matmul(full, weights)[..., 0]
        line = np.empty((n_channels, self._hops), np.complex128)
        line.real, line.imag = parts
        back = np.matmul(others, weights)[..., 0].astype(np.float64)
        quadrature = (middle[1, :, :, 0] * back[0] - middle[0, :, :, 0] * back[1]) / (np.hypot(*back) + 1e-300)
        narrow = full[0, :, -1, self._narrow] + 1j * full[1, :, -1, self._narrow]
        return Smoothed(line, quadrature, mix @ self.noise_shares, narrow, present)

    def _compare(self, across: NDArray[np.float32], present: NDArray[np.bool_], followed_s: Floats) -> Floats:
        since = np.maximum(followed_s - self._lag * self._quantum_s / self._hops, 0.0) / self._quantum_s
        gain = np.maximum(self._gain, 1.0 / (1.0 + since)) * present.mean(axis=1)
        square = np.mean(across**2, axis=1, dtype=np.float64)
        self._error += gain[:, None] * (square - self._error)
        least = self._error.min(axis=1, keepdims=True)
        mix: Floats = np.exp(-(self._error - least) / (least + 1e-300) * self._sharpness)
        mix /= mix.sum(axis=1, keepdims=True)
        return mix

    @staticmethod
    def _narrow_index(pairs: list[tuple[int, int]]) -> int:
        return next(index for index, (_, past) in enumerate(pairs) if past == 5)


def _raised_cosine(i: NDArray[np.int64], future: int, past: int) -> Floats:
    half = np.where(i >= 0, future + 1.0, past + 1.0)
    window: Floats = np.where(np.abs(i) < half, np.cos(np.pi * i / (2.0 * half)), 0.0) ** 2
    return window


def _noise_shares(windows: Floats, overlap_correlation: Floats) -> Floats:
    shares = np.zeros(len(windows))
    for i, correlation in enumerate(overlap_correlation):
        products = windows[:, i:] * windows[:, : windows.shape[1] - i]
        shares += (1.0 if i == 0 else 2.0) * correlation * products.sum(axis=1)
    return shares


def _staggered(windows: Floats, hops: int) -> NDArray[np.float32]:
    """One matrix for all hops of a quantum: (taps + hops - 1, hops * windows)."""
    n_windows, taps = windows.shape
    kernels = np.zeros((taps + hops - 1, hops, n_windows), np.float32)
    for k in range(hops):
        kernels[k : k + taps, k] = windows.T
    return kernels.reshape(taps + hops - 1, hops * n_windows)
