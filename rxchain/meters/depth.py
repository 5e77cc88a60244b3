"""Depth of modulation: how far the true envelope rises and falls about the mean carrier, noise taken out.

The upright channel's real part over the carrier, less one, is the message; its imaginary part is noise of the same kind.
A short-time Wiener filter, told by the imaginary part how much noise each bin holds, smooths the message; its peaks are
then compared with those after the real noise, shaped alike, has been added back: half the difference is what the peak of
a smoothed programme falls short, the scatter of the draws its uncertainty. Negative peaks beyond 100 % come out by
themselves, because the real part changes sign where the envelope folds.
"""

from __future__ import annotations

from collections import deque
from typing import TypeAlias

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.streams import Bools, ComplexBlock, FloatBlock, Floats

_OVERSAMPLING = 4
_DRAWS = 6
_MOST_LINES, _LINE_BINS = 6, 3  # tones that make a message, bins on either side of each
_CLEAR_LINE = 20.0  # power of a line's strongest bin over the mean noise in one
_LEFT_BY_LINES = 0.04  # share of the message's power that they may leave
RECENT_CHUNKS = 12  # about 3 s
_SEED = 1
_WORTH = 0.95  # of the highest plain peak so far
_FIRST_PEAK = 1e-3
_LATTICE = 32  # fine samples whose highest stands for them when noise is added back

Rows: TypeAlias = NDArray[np.intp]


class DepthMeter:
    """Peaks of a group's messages, chunk by chunk; keeps the programme's extremes.

    is_double : channels whose sidebands mirror each other. Their noise is what the imaginary part holds and their
        envelope is the real part, sign and all; elsewhere the imaginary part is message too, the envelope is the
        magnitude, and noise like the channel's own is drawn from a generator.
    """

    def __init__(self, is_double: Bools, frame: int, rate_hz: float, bands_hz: list[tuple[float, float]]) -> None:
        self._is_double = is_double
        self._frame, self._rate_hz = frame, rate_hz
        n = frame // 2 + 1
        frequency_hz = np.arange(n) * rate_hz / frame
        self._bands_hz = np.array(bands_hz)
        self._band = np.array([(frequency_hz >= low) & (frequency_hz <= high) for low, high in bands_hz], np.float32)
        self._root = np.sqrt(np.hanning(frame + 1)[:-1]).astype(np.float32)
        self._chunk_window: Floats = np.zeros(0)
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        n = len(self._band)
        self._noise_power = np.zeros(self._band.shape, np.float32)
        # For the positive and the negative side: smoothed peak, mean of the draws at that peak, their scatter.
        self._best = np.full((2, 3, n), 0.0)
        self._highest_raw = np.zeros((2, n))
        self._noise_rms = np.zeros(n)
        self._any = np.zeros(n, bool)
        self._latest: deque[Floats] = deque(maxlen=RECENT_CHUNKS)
        self._generator = np.random.default_rng(_SEED)

    def process(
        self, frames: ComplexBlock, upright: ComplexBlock, carrier: Floats, density: Floats, valid: Bools
    ) -> None:
        """A chunk of upright samples.

        frames : complex64, (channels, frames, samples), half overlapping, half a frame more on either side than counts.
        upright : the chunk as it is, (channels, samples). carrier : its mean amplitude; density : the channel's noise
        density; (channels,). Channels that are not ``valid`` are left out, and so are chunks whose plain peaks lie well
        under the highest so far: they cannot hold the programme's extremes.
        """
        safe = np.where(valid, np.maximum(carrier, 1e-20), 1.0)
        scaled = np.where(self._is_double[:, None], upright.real, np.abs(upright)) / safe[:, None] - 1.0
        raw = np.stack([scaled.max(axis=1), -scaled.min(axis=1)])
        self._latest.append(np.where(valid, np.minimum(raw, np.maximum(self._best[:, 0], _FIRST_PEAK)), 0.0))
        worth = valid & (~self._any | (raw > _WORTH * self._highest_raw).any(axis=0))
        self._highest_raw = np.where(valid, np.maximum(raw, self._highest_raw), self._highest_raw)
        rows = np.flatnonzero(worth)
        if len(rows):
            self._measure(rows, frames[rows], upright[rows], safe[rows], density[rows])

    def _measure(
        self, rows: Rows, frames: ComplexBlock, upright: ComplexBlock, carrier: Floats, density: Floats
    ) -> None:
        scaled = frames * (1.0 / carrier)[:, None, None].astype(np.float32)
        real = np.where(self._is_double[rows, None, None], scaled.real, np.abs(scaled)) - np.float32(1.0)
        in_phase: ComplexBlock = scipy.fft.rfft(real * self._root, axis=2)
        in_phase *= self._band[rows, None]
        quadrature: ComplexBlock = scipy.fft.rfft(scaled.imag * self._root, axis=2)
        sided = np.flatnonzero(~self._is_double[rows])
        if len(sided):
            draws = self._generator.standard_normal((len(sided), *quadrature.shape[1:], 2), np.float32).view(
                np.complex64
            )
            level = np.sqrt(density[sided] / 2.0 * self._rate_hz * np.sum(self._root**2) / 2.0) / carrier[sided]
            quadrature[sided] = draws[..., 0] * level[:, None, None].astype(np.float32)
        quadrature *= self._band[rows, None]
        self._follow_noise(rows, quadrature)
        noise = self._noise_power[rows, None, :] + np.float32(1e-20)
        power = np.square(in_phase.real) + np.square(in_phase.imag)
        prior = np.maximum(_smoothed(power) / noise - 1.0, 0.0)
        gain = (prior / (1.0 + prior)).astype(np.float32)
        in_phase *= gain
        quadrature *= np.sqrt(gain)
        message, shaped = self._joined(in_phase), self._joined(quadrature)
        self._noise_rms[rows] = np.std(shaped, axis=1)
        self._keep_extremes(rows, message, shaped, self._steady_lines(rows, upright, carrier))
        self._any[rows] = True

    def peaks(self) -> tuple[Floats, Floats, Floats, Floats, Bools]:
        """Positive peak, its deviation, negative peak, its deviation, and whether there is anything to tell."""
        sides = []
        for smooth, drawn, scatter in self._best:
            value = (smooth + drawn) / 2.0
            deviation = np.sqrt(
                (1.3 * scatter) ** 2 + ((drawn - smooth) / 2.0) ** 2 + (0.5 * self._noise_rms) ** 2 + 1e-3**2
            )
            sides += [value, deviation]
        return sides[0], sides[1], sides[2], sides[3], self._any

    def recent_peaks(self) -> tuple[Floats, Floats, Floats, Floats, Bools]:
        """The same over the last chunks alone."""
        recent = np.max(self._latest, axis=0) if self._latest else np.zeros_like(self._best[:, 0])
        kept = self._best
        self._best = kept.copy()
        self._best[:, 1] += recent - kept[:, 0]  # what the draws add to a peak is much the same from peak to peak
        self._best[:, 0] = recent
        try:
            return self.peaks()
        finally:
            self._best = kept

    def _follow_noise(self, rows: Rows, quadrature: ComplexBlock) -> None:
        """Noise power of each bin: a slow mean of the quadrature component's, smoothed over nine bins."""
        power = np.mean(np.square(quadrature.real) + np.square(quadrature.imag), axis=1)
        padded = np.pad(power, ((0, 0), (4, 4)), mode="edge")
        smooth = np.cumsum(np.pad(padded, ((0, 0), (1, 0))), axis=1, dtype=np.float64)
        mean = ((smooth[:, 9:] - smooth[:, :-9]) / 9.0).astype(np.float32)
        weight = np.where(self._any[rows], 0.2, 1.0).astype(np.float32)[:, None]
        self._noise_power[rows] += weight * (mean - self._noise_power[rows])

    def _joined(self, spectra: ComplexBlock) -> FloatBlock:
        """The frames overlapped and added at four times the rate; the half frames at the ends are left out."""
        n_channels = len(spectra)
        fine = self._frame * _OVERSAMPLING
        half = fine // 2
        window = np.repeat(self._root, _OVERSAMPLING)
        pieces = scipy.fft.irfft(spectra, fine, axis=2) * (window * np.float32(_OVERSAMPLING))
        joined: FloatBlock = pieces[:, :-1, half:] + pieces[:, 1:, :half]
        return joined.reshape(n_channels, -1)

    def _steady_lines(self, rows: Rows, upright: ComplexBlock, carrier: Floats) -> tuple[Bools, Floats, Floats, Floats]:
        """Where a few steady tones are all there is to the message: their peaks, and how much noise is left in them.

        (channels,) each: whether it is so, rise, fall, noise over the carrier. The chunk's own transform is far
        sharper than a frame's, so that hardly any noise stays with the lines.
        """
        n = upright.shape[1]
        if len(self._chunk_window) != n:
            self._chunk_window = np.hanning(n + 1)[:-1]
        frequency_hz = np.fft.rfftfreq(n, 1.0 / self._rate_hz)
        band = (frequency_hz >= self._bands_hz[rows, :1]) & (frequency_hz <= self._bands_hz[rows, 1:])
        scaled = upright / carrier[:, None]
        spectrum = scipy.fft.rfft((scaled.real - 1.0) * self._chunk_window, axis=1) * band
        noise = scipy.fft.rfft(scaled.imag * self._chunk_window, axis=1) * band
        power = np.abs(spectrum) ** 2
        noise_power = (np.abs(noise) ** 2).sum(axis=1)
        kept = np.zeros(power.shape, bool)
        each = np.arange(len(power))
        left = power.copy()
        clear = _CLEAR_LINE * noise_power / np.maximum(band.sum(axis=1), 1)
        for _ in range(_MOST_LINES):
            line = left.argmax(axis=1)
            is_clear = left[each, line] > clear
            around = np.clip(line[:, None] + np.arange(-_LINE_BINS, _LINE_BINS + 1), 0, power.shape[1] - 1)
            kept[each[:, None], around] |= is_clear[:, None]
            left[each[:, None], around] = np.where(is_clear[:, None], 0.0, left[each[:, None], around])
        message = np.maximum(power.sum(axis=1) - noise_power, 1e-30)
        is_steady = (left.sum(axis=1) - noise_power < _LEFT_BY_LINES * message) & (message > noise_power)
        is_steady &= self._is_double[rows]
        middle = slice(n // 4 * _OVERSAMPLING, n * 3 // 4 * _OVERSAMPLING)
        fine = scipy.fft.irfft(spectrum * kept, n * _OVERSAMPLING, axis=1)[:, middle] * _OVERSAMPLING
        fine /= np.repeat(self._chunk_window, _OVERSAMPLING)[middle]
        share = kept.sum(axis=1) / np.maximum(band.sum(axis=1), 1)
        rms = np.sqrt(noise_power * 2.0 / (n * np.sum(self._chunk_window**2)) * share)
        return is_steady, fine.max(axis=1), -fine.min(axis=1), rms

    def _keep_extremes(
        self, rows: Rows, message: FloatBlock, noise: FloatBlock, lines: tuple[Bools, Floats, Floats, Floats]
    ) -> None:
        is_steady, *line_peaks, line_noise = lines
        n = message.shape[1] // _LATTICE * _LATTICE
        cells = message[:, :n].reshape(len(rows), -1, _LATTICE)
        for side, sign in enumerate((1.0, -1.0)):
            highest = cells.max(axis=2) if sign > 0 else -cells.min(axis=2)
            smooth = np.where(is_steady, line_peaks[side], highest.max(axis=1))
            draws = []
            for k in range(_DRAWS):
                # Real noise at other times of the same chunk: shifted, and turned over every second time.
                at = (np.arange(highest.shape[1]) * _LATTICE + (k + 1) * n // (_DRAWS + 1)) % n
                draws.append((highest + (1 if k % 2 else -1) * noise[:, at]).max(axis=1))
            mean = np.where(is_steady, smooth, np.mean(draws, axis=0))
            scatter = np.where(is_steady, line_noise, np.std(draws, axis=0))
            higher = smooth > self._best[side, 0, rows]
            for place, value in enumerate((smooth, mean, scatter)):
                self._best[side, place, rows] = np.where(higher, value, self._best[side, place, rows])
        self._noise_rms[rows] = np.where(is_steady, line_noise, self._noise_rms[rows])


def _smoothed(power: FloatBlock) -> FloatBlock:
    """Mean over three frames and three bins, edges repeated."""
    in_time = np.pad(power, ((0, 0), (1, 1), (0, 0)), mode="edge")
    mean = in_time[:, :-2] + in_time[:, 1:-1] + in_time[:, 2:]
    in_frequency = np.pad(mean, ((0, 0), (0, 0), (1, 1)), mode="edge")
    smooth = in_frequency[:, :, :-2] + in_frequency[:, :, 1:-1] + in_frequency[:, :, 2:]
    smooth *= np.float32(1.0 / 9.0)
    return smooth
