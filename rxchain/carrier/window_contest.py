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
_SHARPNESS_S = 0.25  # an excess e of a window's error counts as exp(-e * 0.25 s / hop)
_RECENT_HOPS = 24
_NARROW_HOPS = 5
_TINY = np.float32(1e-37)


@dataclass(frozen=True, slots=True)
class Smoothed:
    """A quantum of smoothed block sums, ``lag`` hops back.

    line : complex128, (channels, hops): the line's phasor against the reference it was turned by.
    recent : complex128, (channels, hops): the same by windows of at most 128 ms to each side: what the line is now.
    quadrature : float64, (channels, hops): what each hop has across the phasor the other hops predict.
    noise_share, recent_share : float64, (channels,): noise power of each over that of one block sum.
    noise_gain : float64, (channels,): what the difference of two quadratures makes of a block sum's noise power.
    narrow : complex128, (channels, hops): the line by a window of 5 hops to each side, for fast motion.
    present : bool, (channels, hops): whether there was any signal at all in the hop.
    """

    line: NDArray[np.complex128]
    recent: NDArray[np.complex128]
    quadrature: Floats
    noise_share: Floats
    recent_share: Floats
    noise_gain: Floats
    narrow: NDArray[np.complex128]
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
        # Overlapped block sums tell less than as many independent ones.
        alike = 2.0 * float(np.sum(overlap_correlation**2)) - 1.0
        self._sharpness = _SHARPNESS_S / hop_s / alike
        i = np.arange(-past, lag + 1)
        windows = np.array([_raised_cosine(i, future, back) for future, back in pairs])
        windows /= windows.sum(axis=1, keepdims=True)
        middle = np.abs(i) <= self._reach
        self._middle_weight = windows[:, middle].sum(axis=1)
        self._shares = _noise_powers(windows, overlap_correlation)
        self._noise_gains = _difference_gains(windows, middle, overlap_correlation)
        self._n_recent = sum(back <= _RECENT_HOPS for _, back in pairs)
        self._narrow = next(index for index, (_, back) in enumerate(pairs) if back >= _NARROW_HOPS)
        self.narrow_share = float(self._shares[self._narrow])
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
        shape = (2, blocks.shape[1], self._hops, self._n_windows)
        centre = blocks.shape[2] - self._lag - self._hops
        around = blocks[:, :, centre - self._reach : centre + self._hops + self._reach]
        middle = blocks[:, :, centre : centre + self._hops, None]
        full = np.matmul(blocks, self._kernels).reshape(shape)
        others = full - np.matmul(around, self._middle_kernels).reshape(shape)
        others /= (1.0 - self._middle_weight).astype(np.float32)
        size = np.sqrt(others[0] ** 2 + others[1] ** 2) + _TINY
        across = (middle[1] * others[0] - middle[0] * others[1]) / size
        # A window too long for the motion may predict a hop upside down, which has no quadrature either.
        along = middle[0] * others[0] + middle[1] * others[1]
        across = np.where(along < 0.0, np.sqrt(middle[0] ** 2 + middle[1] ** 2), across)
        power = middle[0, :, :, 0].astype(np.float64) ** 2 + middle[1, :, :, 0].astype(np.float64) ** 2
        present = power > 1e-6 * noise[:, None]
        mix = self._compare(across, present, followed_s)
        # The windows that reach far back lend their weight to the longest that does not.
        recent = mix[:, : self._n_recent].copy()
        recent[:, -1] += mix[:, self._n_recent :].sum(axis=1)
        line = _weighed(full, mix)
        back = _weighed(others, mix)
        quadrature = (middle[1, :, :, 0] * back.real - middle[0, :, :, 0] * back.imag) / (np.abs(back) + 1e-300)
        narrow = full[0, ..., self._narrow].astype(np.float64) + 1j * full[1, ..., self._narrow]
        return Smoothed(
            line=line,
            recent=_weighed(full[..., : self._n_recent], recent),
            quadrature=quadrature,
            noise_share=mix @ self._shares,
            recent_share=recent @ self._shares[: self._n_recent],
            noise_gain=mix @ self._noise_gains,
            narrow=narrow,
            present=present,
        )

    def _compare(self, across: NDArray[np.float32], present: NDArray[np.bool_], followed_s: Floats) -> Floats:
        since = np.maximum(followed_s - self._lag * self._quantum_s / self._hops, 0.0) / self._quantum_s
        gain = np.maximum(self._gain, 1.0 / (1.0 + since)) * present.mean(axis=1)
        square = np.mean(across**2, axis=1, dtype=np.float64)
        self._error += gain[:, None] * (square - self._error)
        least = self._error.min(axis=1, keepdims=True)
        mix: Floats = np.exp(-(self._error - least) / (least + 1e-300) * self._sharpness)
        mix /= mix.sum(axis=1, keepdims=True)
        return mix


def _raised_cosine(i: NDArray[np.int64], future: int, past: int) -> Floats:
    half = np.where(i >= 0, future + 1.0, past + 1.0)
    window: Floats = np.where(np.abs(i) < half, np.cos(np.pi * i / (2.0 * half)), 0.0) ** 2
    return window


def _weighed(bank: NDArray[np.float32], mix: Floats) -> NDArray[np.complex128]:
    parts = np.matmul(bank, mix.astype(np.float32)[:, :, None])[..., 0]
    line = np.empty(parts.shape[1:], np.complex128)
    line.real, line.imag = parts
    return line


def _noise_powers(windows: Floats, overlap_correlation: Floats) -> Floats:
    """Noise power of each window's output over that of one block sum; overlapped block sums share samples."""
    powers = np.zeros(len(windows))
    for i, correlation in enumerate(overlap_correlation):
        products = windows[:, i:] * windows[:, : windows.shape[1] - i]
        powers += (1.0 if i == 0 else 2.0) * correlation * products.sum(axis=1)
    return powers


def _difference_gains(windows: Floats, middle: NDArray[np.bool_], overlap_correlation: Floats) -> Floats:
    """Noise power of a hop less its prediction, less the same ``span`` hops before, over twice a block sum's."""
    span = len(overlap_correlation)
    residue = np.where(middle, 0.0, -windows) / np.sum(np.where(middle, 0.0, windows), axis=1, keepdims=True)
    residue[:, int(np.flatnonzero(middle).mean())] += 1.0
    padded = np.pad(residue, ((0, 0), (span, span)))
    return 0.5 * _noise_powers(padded[:, span:] - padded[:, :-span], overlap_correlation)


def _staggered(windows: Floats, hops: int) -> NDArray[np.float32]:
    """One matrix for all hops of a quantum: (taps + hops - 1, hops * windows)."""
    n_windows, taps = windows.shape
    kernels = np.zeros((taps + hops - 1, hops, n_windows), np.float32)
    for k in range(hops):
        kernels[k : k + taps, k] = windows.T
    return kernels.reshape(taps + hops - 1, hops * n_windows)
