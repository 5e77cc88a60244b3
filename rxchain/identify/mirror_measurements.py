"""What the two sides of the reference say about each other.

The mirrored product S(f0 + f) S(f0 - f) of a double sideband is |M|^2 exp(2j phi) whatever the message, so nothing has to
be locked: its phase is one for all cells. Two messages in quadrature give the same axis with both signs, independent
sidebands any phase, a single sideband nothing; angle modulation lies on the carrier's negative axis.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from rxchain.identify.reference import SIDE_BINS, SLOW_HZ, References
from rxchain.identify.short_time import (
    BIN_HZ,
    FRAME,
    HOP,
    RATE_HZ,
    WINDOW_POWER,
    ChannelWindows,
    decibels,
    hann_smoothed,
    short_time,
)
from rxchain.streams import Bools, ComplexBlock, Floats

_BLOCK_FRAMES, _BLOCK_BINS = 16, 10  # products are pooled over 0.34 s by 234 Hz
_STRONG = 4.0  # times the noise of a block
_HIGH_HZ, _LOW_HZ = 1_100.0, 640.0
_MOST = 0.995  # a coherence of 1 has no finite area tangent


def mirror_measurements(windows: ChannelWindows, found: References) -> tuple[dict[str, Floats], Bools]:
    """The measurements of each channel's two sides, (channels,) each, by name; and whether the upper one is stronger."""
    t = np.arange(windows.iq.shape[1]) / RATE_HZ
    frames = short_time((windows.iq * np.exp(-2j * np.pi * found.hz[:, None] * t)).astype(np.complex64))
    upper, lower = frames[:, :, SIDE_BINS], frames[:, :, -SIDE_BINS]
    above = (np.square(upper.real) + np.square(upper.imag)) / WINDOW_POWER
    below = (np.square(lower.real) + np.square(lower.imag)) / WINDOW_POWER
    product = upper * lower / np.float32(WINDOW_POWER)
    size = np.abs(product) + 1e-12
    n_frames = min(_BLOCK_FRAMES, frames.shape[1])
    blocks = _Blocks(
        above=_pooled(above, n_frames),
        below=_pooled(below, n_frames),
        product=_pooled(product, n_frames),
        squared=_pooled(product * product / size, n_frames),
        size=_pooled(size, n_frames),
        noise=windows.floor * n_frames * _BLOCK_BINS,
    )
    values, strong = blocks.agreements()
    powers, is_upper = _side_powers(above, below, windows)
    values |= powers
    values |= blocks.low_agreements(is_upper, strong)
    values["tr_lo"] = _against_carrier(blocks, product, found, is_upper, n_frames)
    values["nc"] = _area_tangent(found.non_circularity)
    values["syl"] = _syllables_db(above, below, windows)
    return values, is_upper


class _Blocks:
    """Mirrored cells pooled into blocks, (channels, times, bands) each; ``noise`` of one side of a block, (channels,)."""

    def __init__(
        self,
        above: NDArray[Any],
        below: NDArray[Any],
        product: ComplexBlock,
        squared: ComplexBlock,
        size: NDArray[Any],
        noise: Floats,
    ) -> None:
        self.above, self.below, self.noise = above.astype(np.float64), below.astype(np.float64), noise
        self.product, self.size = product, size.astype(np.float64)
        self.total = self.above + self.below
        self.geometric = np.sqrt(self.above * self.below)
        self.coherent, self.unsigned = np.abs(product).astype(np.float64), np.abs(squared).astype(np.float64)

    def agreements(self) -> tuple[dict[str, Floats], Bools]:
        """Over the strong blocks: coherence, agreement of magnitudes, flips of sign; and the strength of the strongest."""
        n = len(self.total)
        ranked = np.sort(self.total.reshape(n, -1), axis=1)
        limit = np.minimum(np.maximum(_STRONG * self.noise, ranked[:, -12]), ranked[:, -8])
        strong = self.total >= limit[:, None, None]
        geometric = _sum(self.geometric, strong)
        signed = np.log(self.coherent / self.size + 1e-6) - 0.25 * np.log(self.unsigned / self.size + 1e-6)
        strongest = ranked[:, -max(3, ranked.shape[1] // 30) :].mean(axis=1)
        return {
            "coh": _area_tangent(_sum(self.coherent, strong) / geometric),
            "magc": _area_tangent(_sum(self.size, strong) / geometric),
            "flip": _sum(signed * self.geometric, strong) / geometric,
            "burst": decibels(strongest / (2.0 * self.noise)),
        }, strong

    def low_agreements(self, is_upper: Bools, strong: Bools) -> dict[str, Floats]:
        """The same near the reference, where a vestige lies: coherence, and the product over the stronger side."""
        n, n_times, _ = self.total.shape
        lowest = self.total[:, :, :3].reshape(n, -1)
        limit = np.sort(lowest, axis=1)[:, -max(4, n_times)]
        low = np.zeros_like(strong)
        low[:, :, :3] = self.total[:, :, :3] >= limit[:, None, None]
        major = self.major(is_upper)
        limit = np.sort(major.reshape(n, -1), axis=1)[:, -max(4, int(0.35 * major[0].size))]
        loud = major >= limit[:, None, None]
        return {
            "coh_lo": _area_tangent(_sum(self.coherent, low) / _sum(self.geometric, low)),
            "t_lo": _sum(self.coherent[:, :, :2], loud) / _sum(major, loud),
        }

    def major(self, is_upper: Bools) -> Floats:
        """The stronger side's two lowest bands."""
        return np.where(is_upper[:, None, None], self.above[:, :, :2], self.below[:, :, :2])


def _pooled(cells: NDArray[Any], n_frames: int) -> NDArray[Any]:
    n, frames, bins = cells.shape
    times = max(1, frames // n_frames)
    whole = cells[:, : times * n_frames]
    # First over the bins, which lie side by side, then over the frames.
    by_bins = whole.reshape(n, times, n_frames, bins // _BLOCK_BINS, _BLOCK_BINS).sum(axis=4)
    return np.asarray(by_bins.sum(axis=2))


def _sum(values: Floats, which: Bools) -> Floats:
    return np.asarray(np.sum(values * which, axis=(1, 2))) + 1e-30


def _area_tangent(values: Floats) -> Floats:
    return np.arctanh(np.clip(values, 0.0, _MOST))


def _side_powers(above: NDArray[Any], below: NDArray[Any], windows: ChannelWindows) -> tuple[dict[str, Floats], Bools]:
    """Balance beyond 1.1 kHz and the weaker side below 640 Hz, noise taken off."""
    floor = windows.floor[:, None]
    upper = above.mean(axis=1, dtype=np.float64) - floor
    lower = below.mean(axis=1, dtype=np.float64) - floor
    deviation = (floor * np.sqrt(1.4 / above.shape[1]))[:, 0]  # of one bin's mean
    bin_hz = SIDE_BINS * BIN_HZ
    active = (upper > 0.1 * floor) | (lower > 0.1 * floor)
    is_upper = _balance(upper, lower, active, deviation) >= 0.0
    sign = np.where(is_upper, 1.0, -1.0)
    high = active & (bin_hz > _HIGH_HZ)
    balance = np.where(high.sum(axis=1) > 4, sign * _balance(upper, lower, high, deviation), 0.0)
    low = bin_hz < _LOW_HZ
    at_upper, at_lower = np.sum(upper[:, low], axis=1), np.sum(lower[:, low], axis=1)
    stronger, weaker = np.where(is_upper, at_upper, at_lower), np.where(is_upper, at_lower, at_upper)
    error = deviation * np.sqrt(low.sum())
    minor = (np.maximum(weaker, 0.0) + 0.5 * error) / (np.maximum(stronger, error) + 0.5 * error)
    return {"bal_hi": balance, "minor_lo": decibels(minor)}, is_upper


def _balance(upper: Floats, lower: Floats, which: Bools, deviation: Floats) -> Floats:
    x, y = np.maximum(np.sum(upper * which, axis=1), 0.0), np.maximum(np.sum(lower * which, axis=1), 0.0)
    return np.asarray((x - y) / (x + y + 2.0 * deviation * np.sqrt(which.sum(axis=1)) + 1e-30))


def _against_carrier(
    blocks: _Blocks, product: ComplexBlock, found: References, is_upper: Bools, n_frames: int
) -> Floats:
    """The product near the reference against the squared phase of what is at it: + for amplitude, - for angle."""
    t = np.arange(found.slow.shape[1]) / SLOW_HZ
    near = hann_smoothed(found.slow * np.exp(-2j * np.pi * found.hz[:, None] * t), 0.2 * SLOW_HZ)
    middles = ((np.arange(product.shape[1]) * HOP + FRAME / 2) / RATE_HZ * SLOW_HZ).astype(np.int64)
    carrier = near[:, np.minimum(middles, near.shape[1] - 1)]
    axis = np.conj(carrier) ** 2 / (np.square(np.abs(carrier)) + 1e-12)
    turned = _pooled((product[:, :, : 2 * _BLOCK_BINS] * axis[:, :, None]).real, n_frames).astype(np.float64)
    n, n_times = turned.shape[:2]
    total = blocks.total[:, :, :2]
    limit = np.sort(total.reshape(n, -1), axis=1)[:, -max(4, int(0.6 * n_times))]
    loud = total >= limit[:, None, None]
    noise = blocks.noise[:, None, None]
    signal = np.maximum(np.sum((blocks.major(is_upper) - noise) * loud, axis=(1, 2)), 0.0)
    return np.asarray(
        np.sum(turned * loud, axis=(1, 2)) / (signal + 0.5 * blocks.noise * np.sqrt(loud.sum(axis=(1, 2)) / 80.0))
    )


def _syllables_db(above: NDArray[Any], below: NDArray[Any], windows: ChannelWindows) -> Floats:
    """Swing of the sidebands' power over 85 ms: syllables, or the steadiness of data."""
    upper, lower = windows.frame_gain[:, SIDE_BINS], windows.frame_gain[:, -SIDE_BINS]
    energy = np.einsum("ctf,cf->ct", above, upper) + np.einsum("ctf,cf->ct", below, lower)
    energy = ndimage.uniform_filter1d(energy, 4, axis=1)[:, ::4]
    noise = (windows.floor * (upper.sum(axis=1) + lower.sum(axis=1)))[:, None]
    signal = np.maximum(energy - noise, 0.0)
    lowest = 0.05 * signal.mean(axis=1, keepdims=True) + 0.1 * noise + 1e-9
    return np.asarray(np.std(decibels(np.maximum(energy - noise, lowest)), axis=1))
