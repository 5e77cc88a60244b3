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
_WEAK_LINE = 2e-4  # of the strongest line's power: what its window may still leave elsewhere
_LEFT_BY_LINES, _LEFT_BY_NOISE = 0.01, 0.03  # share of the message's power that they may leave, and of the noise's
RECENT_CHUNKS = 12  # about 3 s
_SEED = 1
_WORTH, _WORTH_DEVIATIONS = 0.9, 1.0  # of the highest plain peak so far, and of the noise under that
_FIRST_PEAK = 1e-3
_SAME_LINES = 4.0  # deviations within which two chunks' lines have the same peak
_LEAST_PEAK_ERROR = 5e-4
# Measured on voices and noise: the part of the noise that stays with a peak, and what the sharp dips of a one-sided
# emission's envelope lose at the channel's rate.
_LEFT_OF_NOISE, _LEFT_OF_NOISE_ONE_SIDED, _CUSP_ERROR = 0.75, 1.1, 0.015
_LATTICE = 32  # fine samples whose highest stands for them when noise is added back

Rows: TypeAlias = NDArray[np.intp]


class DepthMeter:
    """Peaks of a group's messages, chunk by chunk; keeps the programme's extremes.

    is_double : channels whose sidebands mirror each other. Their noise is what the imaginary part holds and their
        envelope is the real part, sign and all; elsewhere the imaginary part is message too, the envelope is the
        magnitude, and noise like the channel's own is drawn from a generator.
    """

    def __init__(
        self,
        is_double: Bools,
        frame: int,
        rate_hz: float,
        bands_hz: list[tuple[float, float]],
        history: int = RECENT_CHUNKS,
    ) -> None:
        self._history = history
        self._is_double = is_double
        self._frame, self._rate_hz = frame, rate_hz
        n = frame // 2 + 1
        bins = np.arange(n)
        self._bands_hz = np.array(bands_hz)
        low, high = (self._bands_hz * frame / rate_hz).T[:, :, None]
        # The window smears a message's edges. An envelope that is no message holds the sidebands' beats as well.
        of_message = (bins >= np.maximum(low - 1.5, np.minimum(low, 2.0))) & (bins <= high + 1.5)
        self._band = np.where(is_double[:, None], of_message, bins <= 2.0 * high).astype(np.float32)
        self._root = np.sqrt(np.hanning(frame + 1)[:-1]).astype(np.float32)
        self._chunk_window: Floats = np.zeros(0)
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        n = len(self._band)
        self._noise_power = np.zeros(self._band.shape, np.float32)
        # For the positive and the negative side: highest smoothed peak, then the highest of each draw.
        self._best = np.zeros((2, 1 + _DRAWS, n))
        self._steady = np.zeros(
            (3, 2, n)
        )  # of steady tones: peak on either side, chunks it is a mean of, deviation of one
        self._unsteady = np.zeros(n)  # chunks of anything else
        self._highest_raw = np.zeros((2, n))
        self._noise_rms = np.zeros(n)
        self._any = np.zeros(n, bool)
        self._latest: deque[Floats] = deque(maxlen=self._history)
        self._generator = np.random.default_rng(_SEED)

    def process(
        self, frames: ComplexBlock, upright: ComplexBlock, carrier: Floats, density: Floats, valid: Bools
    ) -> None:
        """A chunk of upright samples.

        frames : complex64, (channels, frames, samples), half overlapping, half a frame more on either side than counts.
        upright : the samples that count, (channels, samples). carrier : their mean amplitude; density : the channel's
        noise density; (channels,). Channels that are not ``valid`` are left out, and so are chunks whose plain peaks lie well
        under the highest so far: they cannot hold the programme's extremes.
        """
        safe = np.where(valid, np.maximum(carrier, 1e-20), 1.0)
        scaled: FloatBlock = upright.real * (1.0 / safe)[:, None].astype(np.float32)
        sided = np.flatnonzero(~self._is_double)
        scaled[sided] = np.abs(upright[sided]) / safe[sided, None]
        scaled -= np.float32(1.0)
        raw = np.stack([side.max(axis=1) + _between_samples(side) for side in (scaled, -scaled)])
        known = np.maximum(self._best[:, 0], self._steady[0])
        self._latest.append(np.where(valid, np.minimum(raw, np.maximum(known, _FIRST_PEAK)), 0.0))
        worth = valid & (
            ~self._any | (raw > _WORTH * self._highest_raw - _WORTH_DEVIATIONS * self._noise_rms).any(axis=0)
        )
        self._highest_raw = np.where(valid, np.maximum(raw, self._highest_raw), self._highest_raw)
        rows = np.flatnonzero(worth)
        if len(rows):
            self._measure(rows, frames[rows], upright[rows], safe[rows], density[rows])

    def _measure(
        self, rows: Rows, frames: ComplexBlock, upright: ComplexBlock, carrier: Floats, density: Floats
    ) -> None:
        scaled = frames * (1.0 / carrier)[:, None, None].astype(np.float32)
        sided = np.flatnonzero(~self._is_double[rows])
        real = scaled.real - np.float32(1.0)
        real[sided] = np.abs(scaled[sided]) - np.float32(1.0)
        in_phase: ComplexBlock = scipy.fft.rfft(real * self._root, axis=2)
        in_phase *= self._band[rows, None]
        quadrature: ComplexBlock = scipy.fft.rfft(scaled.imag * self._root, axis=2)
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
        self._noise_rms[rows] = np.sqrt(self._noise_power[rows].sum(axis=1)) * (2.0 / self._frame)
        is_steady, rise, fall, deviation = self._steady_lines(rows, upright, carrier)
        self._unsteady[rows] += ~is_steady
        self._keep_lines(rows, is_steady, np.stack([rise, fall]), deviation)
        self._keep_extremes(rows, message, shaped, is_steady)
        self._any[rows] = True

    def peaks(self) -> tuple[Floats, Floats, Floats, Floats, Bools]:
        """Positive peak, its deviation, negative peak, its deviation, and whether there is anything to tell."""
        return self._read(self._best)

    def _read(self, best: Floats) -> tuple[Floats, Floats, Floats, Floats, Bools]:
        sides = []
        for (smooth, *draws), (lines, number, line_deviation) in zip(
            best, self._steady.transpose(1, 0, 2), strict=True
        ):
            drawn, scatter = np.mean(draws, axis=0), np.std(draws, axis=0)
            value = (smooth + drawn) / 2.0
            variance = (1.3 * scatter) ** 2 + ((drawn - smooth) / 2.0) ** 2
            variance = np.where(self._is_double, variance, variance + _CUSP_ERROR**2)
            # A peak is one short event: no smoothing takes more than a part of the noise from it.
            left_of_noise = np.where(self._is_double, _LEFT_OF_NOISE, _LEFT_OF_NOISE_ONE_SIDED) * self._noise_rms
            variance = np.maximum(variance, left_of_noise**2)
            # A few chunks of a programme that look like tones do not make it one.
            steady = (number > 0) & ((number >= self._unsteady) | (lines > value))
            variance = np.where(steady, line_deviation**2 / np.maximum(number, 1.0), variance)
            sides += [np.where(steady, lines, value), np.sqrt(variance + _LEAST_PEAK_ERROR**2)]
        return sides[0], sides[1], sides[2], sides[3], self._any

    def recent_peaks(self, chunks: slice = slice(-RECENT_CHUNKS, None)) -> tuple[Floats, Floats, Floats, Floats, Bools]:
        """The same over the last chunks alone, or over others of those still known."""
        latest = list(self._latest)[chunks]
        recent = np.max(latest, axis=0) if latest else np.zeros_like(self._best[:, 0])
        best = self._best.copy()
        best[:, 1:] += (recent - best[:, 0])[:, None]  # what the draws add to a peak is much the same from peak to peak
        best[:, 0] = recent
        return self._read(best)

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
        """Where a few steady tones are all there is to the message: their peaks, and one deviation of these.

        (channels,) each: whether it is so, rise, fall, deviation. The chunk's own transform is far sharper than a
        frame's, so that hardly any noise stays with the lines; what they add up to is made anew from their amplitudes,
        frequencies and phases.
        """
        n = upright.shape[1]
        if len(self._chunk_window) != n:
            self._chunk_window = np.hanning(n + 1)[:-1]
        frequency_hz = np.fft.rfftfreq(n, 1.0 / self._rate_hz)
        band = (frequency_hz >= self._bands_hz[rows, :1]) & (frequency_hz <= self._bands_hz[rows, 1:])
        scaled = upright * (1.0 / carrier)[:, None].astype(np.float32)
        window = self._chunk_window.astype(np.float32)
        spectrum = scipy.fft.rfft((scaled.real - np.float32(1.0)) * window, axis=1) * band
        noise = scipy.fft.rfft(scaled.imag * window, axis=1) * band
        left = np.abs(spectrum) ** 2
        noise_power = (np.abs(noise) ** 2).sum(axis=1)
        message = np.maximum(left.sum(axis=1) - noise_power, 1e-30)
        in_a_bin = noise_power / np.maximum(band.sum(axis=1), 1)
        each = np.arange(len(rows))
        strongest = left.max(axis=1)
        lines, are_clear = [], []
        for _ in range(_MOST_LINES):
            line = left.argmax(axis=1)
            is_clear = left[each, line] > np.maximum(_CLEAR_LINE * in_a_bin, _WEAK_LINE * strongest)
            around = np.clip(line[:, None] + np.arange(-_LINE_BINS, _LINE_BINS + 1), 0, left.shape[1] - 1)
            left[each[:, None], around] = np.where(is_clear[:, None], 0.0, left[each[:, None], around])
            lines.append(np.clip(line, 1, left.shape[1] - 2))
            are_clear.append(is_clear)
        is_steady = left.sum(axis=1) - noise_power < _LEFT_BY_LINES * message + _LEFT_BY_NOISE * noise_power
        clear = np.array(are_clear).T
        is_steady &= self._is_double[rows] & clear.any(axis=1) & (message > noise_power)
        rise, fall = np.zeros(len(rows)), np.zeros(len(rows))
        steady = np.flatnonzero(is_steady)
        if len(steady):
            sums = self._line_sums(spectrum[steady], np.array(lines).T[steady], clear[steady])
            rise[steady], fall[steady] = sums.max(axis=1), -sums.min(axis=1)
        # A line's amplitude is read off one bin, and from its neighbours' how far beside it the line lies.
        deviation = np.sqrt(4.0 * in_a_bin * np.maximum(clear.sum(axis=1), 1)) / self._chunk_window.sum()
        return is_steady, rise, fall, deviation

    def _line_sums(self, spectrum: ComplexBlock, lines: NDArray[np.intp], clear: Bools) -> Floats:
        """The sum of the lines at four times the rate, (channels, fine samples); lines are those that are clear."""
        each = np.arange(len(spectrum))[:, None]
        peak, before, after = (spectrum[each, lines + step] for step in (0, -1, 1))
        side = np.where(np.abs(after) >= np.abs(before), 1.0, -1.0)
        ratio = np.maximum(np.abs(after), np.abs(before)) / np.maximum(np.abs(peak), 1e-300)
        beside = side * np.clip((2.0 * ratio - 1.0) / (ratio + 1.0), 0.0, 0.5)  # bins; exact for a Hann window
        amplitude = 2.0 * np.abs(peak) * (1.0 - beside**2) / np.sinc(beside) / self._chunk_window.sum() * clear
        phase = np.angle(peak) - np.pi * beside
        n = len(self._chunk_window)
        t = 2.0 * np.pi * np.arange(n * _OVERSAMPLING) / (n * _OVERSAMPLING)
        total = np.zeros((len(spectrum), len(t)))
        for k in range(lines.shape[1]):
            if clear[:, k].any():
                total += amplitude[:, k, None] * np.cos((lines + beside)[:, k, None] * t + phase[:, k, None])
        return total

    def _keep_lines(self, rows: Rows, is_steady: Bools, peaks: Floats, deviation: Floats) -> None:
        """Chunks of the same steady tones are averaged; tones that rise start anew."""
        mean, number, _ = self._steady[:, :, rows]
        reach = _SAME_LINES * deviation * np.sqrt(1.0 + 1.0 / np.maximum(number, 1.0)) + _LEAST_PEAK_ERROR
        again = is_steady & (np.abs(peaks - mean) < reach) & (number > 0)
        anew = is_steady & ~again & (peaks > mean)
        number = np.where(again, number + 1.0, np.where(anew, 1.0, number))
        mean = np.where(again, mean + (peaks - mean) / np.maximum(number, 1.0), np.where(anew, peaks, mean))
        self._steady[:, :, rows] = [mean, number, np.where(again | anew, deviation, self._steady[2][:, rows])]

    def _keep_extremes(self, rows: Rows, message: FloatBlock, noise: FloatBlock, is_steady: Bools) -> None:
        n = message.shape[1] // _LATTICE * _LATTICE
        cells = message[:, :n].reshape(len(rows), -1, _LATTICE)
        for side, sign in enumerate((1.0, -1.0)):
            highest = cells.max(axis=2) if sign > 0 else -cells.min(axis=2)
            highest += _between_samples(sign * message)[:, None]
            smooth = highest.max(axis=1)
            draws = []
            for k in range(_DRAWS):
                # Real noise at other times of the same chunk: shifted, and turned over every second time.
                at = (np.arange(highest.shape[1]) * _LATTICE + (k + 1) * n // (_DRAWS + 1)) % n
                draws.append((highest + (1 if k % 2 else -1) * noise[:, at]).max(axis=1))
            highest_yet = self._best[side][:, rows]
            self._best[side][:, rows] = np.where(is_steady, highest_yet, np.maximum(highest_yet, [smooth, *draws]))


def _between_samples(message: FloatBlock) -> FloatBlock:
    """How far a parabola through the highest sample and its neighbours rises above it, (channels,)."""
    last = message.shape[1] - 1
    highest = message.argmax(axis=1)
    at = np.clip(highest, 1, last - 1)
    before, top, after = (message[np.arange(len(message)), at + step] for step in (-1, 0, 1))
    rise = (before - after) ** 2 / np.maximum(8.0 * (2.0 * top - before - after), 1e-12)
    return np.where((highest > 0) & (highest < last), rise, np.float32(0.0))


def _smoothed(power: FloatBlock) -> FloatBlock:
    """Mean over three frames and three bins, edges repeated."""
    in_time = np.pad(power, ((0, 0), (1, 1), (0, 0)), mode="edge")
    mean = in_time[:, :-2] + in_time[:, 1:-1] + in_time[:, 2:]
    in_frequency = np.pad(mean, ((0, 0), (0, 0), (1, 1)), mode="edge")
    smooth = in_frequency[:, :, :-2] + in_frequency[:, :, 1:-1] + in_frequency[:, :, 2:]
    smooth *= np.float32(1.0 / 9.0)
    return smooth
