"""A line at the offset itself, whatever the pitch does: the third-order product of a voice.

Of all sums and differences of three lines ``d + k f0``, those with ``k1 + k2 - k3 = 0`` fall on ``d``, exactly; the others
lie at ``d + m f0`` and smear as the pitch moves. So the spectrum of ``y |y|^2``, y the analytic signal, has a narrow line
at the offset, and that gives the last digit. By itself it has no scale of confidence.
"""

from __future__ import annotations

import numpy as np
import scipy.fft

from rxchain.carrier.speech_frames import SpeechFrames
from rxchain.carrier.speech_memory import SpeechMemory
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import Bools, ComplexBlock, FloatBlock, Floats

_POINTS = 384  # of a frame's inverse transform: a rate of about 6 kHz, at which the product's aliases stay off the line
_DECIMATION = 6
_SPECTRUM_STEPS = 8  # steps of 32 ms in a spectrum
_EVERY_STEPS = 2
_GRID_HZ = 200.0
_SPACING_HZ = 2.0
_WHITENING_BINS = 5  # to each side, about 80 Hz
_WHITENING_DEPTH = 1e-3
_LEARNING_FRAMES = 100
_LEARNING_GAIN, _KEEPING_GAIN = 0.05, 0.01
_PAUSE_SHARE = 0.05  # of the long mean of the power is added to the short one: pauses stay quiet
_TINY = 1e-20
_STEP = _POINTS // _DECIMATION // 2  # samples of the decimated product a step


class SpeechLine:
    """Gathers the spectra of the third-order product near the offset.

    grid_hz : float64, (points,): offsets of the spectrum, evenly spaced by about 2 Hz, the middle one 0.
    """

    def __init__(self, n_channels: int, frames: SpeechFrames) -> None:
        line_rate_hz = _POINTS // _DECIMATION * frames.bin_hz
        self._length = next_smooth(round(line_rate_hz / _SPACING_HZ))
        spacing_hz = line_rate_hz / self._length
        reach = round(_GRID_HZ / spacing_hz)
        self._bins = np.arange(-reach, reach + 1)
        self.grid_hz: Floats = np.asarray(self._bins * spacing_hz, np.float64)
        self._first_bin = frames.first_bin
        self._window = np.hanning(_SPECTRUM_STEPS * _STEP + 2)[1:-1].astype(np.float32)
        # What the triangle takes away at the spectrum's edges, as power.
        self._droop = (np.sinc(self.grid_hz / line_rate_hz) ** -4).astype(np.float32)
        rise = (np.arange(_DECIMATION) + 0.5) / _DECIMATION
        self._triangle = np.stack([rise, 1.0 - rise], axis=1).astype(np.float32)
        self._ramp = ((np.arange(_POINTS // 2) + 0.5) / (_POINTS // 2)).astype(np.float32)
        self._spectrum = SpeechMemory(n_channels, len(self.grid_hz))
        self._weight = SpeechMemory(n_channels, 1)
        self._half: ComplexBlock = np.zeros((n_channels, _POINTS // 2), np.complex64)
        self._rising: ComplexBlock = np.zeros((n_channels, 1), np.complex64)
        self._product: ComplexBlock = np.zeros((n_channels, _SPECTRUM_STEPS * _STEP), np.complex64)
        self._frames = 0

    def add(self, spectrum: ComplexBlock, power: FloatBlock, lately: FloatBlock) -> None:
        """Take in a frame's spectrum and power, (n_channels, bins), and the weight of the voicing, (n_channels,)."""
        signal = self._joined(spectrum * self._whitening(power))
        product = self._decimated(self._third_order(signal))
        self._product = np.concatenate([self._product[:, _STEP:], product], axis=1)
        self._frames += 1
        if self._frames % _EVERY_STEPS:
            return
        lines = scipy.fft.fft(self._product * self._window, self._length, axis=1)[:, self._bins]
        lines_power = (lines.real**2 + lines.imag**2) * self._droop
        lines_power /= lines_power.mean(axis=1, keepdims=True) + _TINY
        self._spectrum.add(_EVERY_STEPS * lately, lately[:, None] * lines_power)
        self._weight.add(_EVERY_STEPS * lately, lately[:, None])

    @property
    def relative(self) -> FloatBlock:
        """The gathered spectrum over its own median, (2, n_channels, points); 1 throughout before anything came in."""
        mean = self._spectrum.sums / (self._weight.sums + 1e-6) + 0.05
        return np.asarray(mean / np.median(mean, axis=2, keepdims=True))

    def forget_old(self, channels: Bools) -> None:
        """Let the slow memories know no more than the quick ones."""
        self._spectrum.forget_old(channels)
        self._weight.forget_old(channels)

    def _whitening(self, power: FloatBlock) -> FloatBlock:
        """Gain that flattens the long-term spectrum: else the strongest formant's lines would be all there is."""
        if self._frames == 0:
            self._long_term = power.copy()
        gain = _KEEPING_GAIN if self._frames > _LEARNING_FRAMES else _LEARNING_GAIN
        self._long_term += gain * (power - self._long_term)
        reach = _WHITENING_BINS
        total = np.cumsum(np.pad(self._long_term, ((0, 0), (reach + 1, reach)), "edge"), axis=1)
        smooth = (total[:, 2 * reach + 1 :] - total[:, : -2 * reach - 1]) / (2 * reach + 1)
        return np.asarray(1.0 / np.sqrt(smooth + _WHITENING_DEPTH * smooth.mean(axis=1, keepdims=True) + _TINY))

    def _joined(self, spectrum: ComplexBlock) -> ComplexBlock:
        """The analytic signal of a step, (n_channels, 192), from overlapping frames whose windows add up to one."""
        padded = np.zeros((len(spectrum), _POINTS), np.complex64)
        padded[:, self._first_bin : self._first_bin + spectrum.shape[1]] = spectrum
        frame = scipy.fft.ifft(padded, axis=1, overwrite_x=True)
        signal = frame[:, : _POINTS // 2] + self._half
        self._half = frame[:, _POINTS // 2 :].copy()
        return np.asarray(signal)

    def _third_order(self, signal: ComplexBlock) -> ComplexBlock:
        """``y |y|^2`` over the interpolated mean of ``|y|^2``: loud syllables count no more than soft ones."""
        power = signal.real**2 + signal.imag**2
        mean = power.mean(axis=1, keepdims=True)
        if self._frames == 0:
            self._mean = self._long_mean = mean
        self._long_mean = self._long_mean + _KEEPING_GAIN * (mean - self._long_mean)
        envelope = self._mean + (mean - self._mean) * self._ramp
        self._mean = mean
        return np.asarray(signal * (power / (envelope + _PAUSE_SHARE * self._long_mean + _TINY)))

    def _decimated(self, product: ComplexBlock) -> ComplexBlock:
        """The product through a triangle over twelve samples, every sixth."""
        pieces = product.reshape(len(product), -1, _DECIMATION) @ self._triangle
        decimated = pieces[:, :, 1].copy()
        decimated[:, 1:] += pieces[:, :-1, 0]
        decimated[:, :1] += self._rising
        self._rising = pieces[:, -1:, 0].copy()
        return decimated
