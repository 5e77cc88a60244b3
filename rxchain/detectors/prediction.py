"""What each detector that could serve would give now: predicted output SINAD, from the channel itself.

The channel is turned once more by its own carrier's phase over the shortest window that leaves the message alone. What
the real part of that gives is the message as it should be; the envelope and the tracked real part are compared with it,
and whatever they do not share is distortion of theirs. Noise is what the imaginary part holds (double sideband) or what
lies beside the emission (one sideband).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from rxchain.emissions import Emission
from rxchain.streams import Bools, ComplexBlock, FloatBlock, Floats

_TINY = 1e-30
_SLOPE_HZ = 300.0
# Carrier over noise in the short window, below which turning by it would do harm.
_TRUST_CARRIER = 10.0**2.5


Rows: TypeAlias = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class PickedChannel:
    """A channel between whose detectors a choice is to be made.

    candidates : of coherent, envelope, upper, lower (coherent from one sideband alone), in the order of preference.
    """

    emission: Emission
    audio_hz: tuple[float, float]
    vestige_hz: float
    candidates: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Prediction:
    """Of one step, for each channel: sinad_db, (channels, candidates); and the terms that made it, (channels,), powers.

    message : the message. noise : what every detector suffers. envelope_distortion, coherent_distortion : what each adds.
    upper_noise, lower_noise : noise and interference on each sideband. deepest : lowest value of the real part over the
    carrier (under 0: over-modulated).
    """

    sinad_db: Floats
    message: Floats
    noise: Floats
    envelope_distortion: Floats
    coherent_distortion: Floats
    upper_noise: Floats
    lower_noise: Floats
    deepest: Floats


class Predictor:
    """Predicts for a group of channels, one step of samples at a time.

    overlap : samples before a step that :meth:`predict` must be given as well.
    """

    def __init__(self, channels: Sequence[PickedChannel], rate_hz: float, usable_hz: float, frame: int) -> None:
        self._channels = tuple(channels)
        self._frame = frame
        lowest_hz = np.array([max(channel.audio_hz[0], 50.0) for channel in channels])
        longest = round(2.0 / float(lowest_hz.min()) * rate_hz) | 1
        self.overlap = longest - 1 + frame
        self._kernels = np.zeros((len(channels), longest))
        for row, low_hz in enumerate(lowest_hz):
            n = round(2.0 / low_hz * rate_hz) | 1
            hann = np.hanning(n + 2)[1:-1]
            self._kernels[row, longest // 2 - n // 2 : longest // 2 + n // 2 + 1] = hann / hann.sum()
        self._rate_hz = rate_hz
        self._kernel_response = np.zeros((len(channels), 0), np.complex64)
        self._own_band = np.zeros((len(channels), 0), np.float32)
        self._kernel_noise = rate_hz * (self._kernels**2).sum(axis=1)  # noise bandwidth of the short window, hertz
        frequency_hz = scipy.fft.fftfreq(frame, 1.0 / rate_hz)
        half = frame // 2
        positive = np.abs(frequency_hz[:half])
        self._bands = np.array(
            [(positive >= c.audio_hz[0]) & (positive <= c.audio_hz[1]) for c in channels], np.float32
        )
        self._mirror = -np.arange(half) % frame
        self._sides = np.array([int(channel.emission.side or 0) for channel in channels])
        self._window = np.hanning(frame + 1)[:-1].astype(np.float32)
        self._scale = 1.0 / (rate_hz * float((self._window.astype(np.float64) ** 2).sum()))
        self._bin_hz = rate_hz / frame
        self._quiet = [self._beside(channel, frequency_hz, usable_hz) for channel in channels]

    def predict(self, window: ComplexBlock, rows: Rows) -> Prediction:
        """From a step of upright samples of some channels, (rows, overlap + step); the prediction is of those alone."""
        bands = self._bands[rows]
        n_taps = self._kernels.shape[1]
        middle = window[:, n_taps // 2 : window.shape[1] - n_taps // 2]
        length = scipy.fft.next_fast_len(window.shape[1] + n_taps)
        spectrum = scipy.fft.fft(window, length, axis=1)
        if self._kernel_response.shape[1] != length:
            self._prepare(length)
        carrier = scipy.fft.ifft(spectrum * self._kernel_response[rows], axis=1)[:, n_taps - 1 : window.shape[1]]
        # What the envelope detector sees: the emission's own band, and nothing of its neighbours.
        own = scipy.fft.ifft(spectrum * self._own_band[rows], axis=1)[:, n_taps // 2 : window.shape[1] - n_taps // 2]
        strength = np.abs(carrier)
        mean_carrier = strength.mean(axis=1, dtype=np.float64)
        turn = np.conj(carrier) / np.maximum(strength, _TINY)
        frames_of = self._frames
        tracked = frames_of(middle)
        density = (np.square(tracked.real) + np.square(tracked.imag)).mean(axis=1, dtype=np.float64) * self._scale
        floor = np.array(
            [
                np.median(row[quiet]) / np.log(2.0) if len(quiet) else 0.0
                for row, quiet in zip(density, [self._quiet[row] for row in rows], strict=True)
            ]
        )
        trusted: Bools = mean_carrier**2 > _TRUST_CARRIER * floor * self._kernel_noise[rows]
        ideal_iq = np.where(trusted[:, None], middle * turn, middle)
        ideal = frames_of(ideal_iq)
        magnitude = np.abs(own)
        envelope = frames_of(magnitude - magnitude.mean(axis=1, keepdims=True))
        low, high = ideal[:, :, : len(self._mirror)], np.conj(ideal[:, :, self._mirror])
        real, imaginary = (low + high) / 2.0, (low - high) / 2.0
        tracked_real = (tracked[:, :, : len(self._mirror)] + np.conj(tracked[:, :, self._mirror])) / 2.0
        envelope_half = envelope[:, :, : len(self._mirror)]
        total, in_quadrature = self._power(real, bands), self._power(imaginary, bands)
        width_hz = bands.sum(axis=1) * self._bin_hz
        one_sided_noise = floor * width_hz / 2.0
        noise = np.where(self._sides[rows] == 0, in_quadrature, one_sided_noise)
        noise = np.maximum(noise, 1e-9 * total + _TINY)
        message = np.maximum(total - noise, 1e-6 * total + _TINY)
        coherent = self._residue(tracked_real, real, bands)
        envelope_extra = self._residue(envelope_half, real, bands)
        upper_noise, lower_noise = self._side_noise(low, high, floor, bands)
        # One sideband of amplitude 1/2, doubled, is the message as it was.
        by_name = {
            "coherent": message / (noise + coherent),
            "envelope": message / (noise + envelope_extra),
            "upper": message / (upper_noise + coherent + _TINY),
            "lower": message / (lower_noise + coherent + _TINY),
        }
        sinad_db = np.array(
            [
                [10.0 * np.log10(by_name[name][k]) for name in self._channels[row].candidates]
                for k, row in enumerate(rows)
            ]
        )
        in_phase = ideal_iq.real / np.maximum(mean_carrier, _TINY)[:, None]
        return Prediction(
            sinad_db, message, noise, envelope_extra, coherent, upper_noise, lower_noise,
            np.asarray(in_phase.min(axis=1), dtype=np.float64),
        )  # fmt: skip

    def _prepare(self, length: int) -> None:
        """Responses at a transform's bins: the short window's, and the emission's band with 300 Hz slopes."""
        self._kernel_response = scipy.fft.fft(self._kernels, length, axis=1).astype(np.complex64)
        frequency_hz = scipy.fft.fftfreq(length, 1.0 / self._rate_hz)
        rows = []
        for channel in self._channels:
            side, high_hz = int(channel.emission.side or 0), channel.audio_hz[1]
            beyond_hz = channel.vestige_hz if channel.emission.is_vestigial else 50.0
            low_hz = -high_hz if side == 0 else -beyond_hz
            signed = frequency_hz * (side or 1)
            outside_hz = np.maximum(np.maximum(low_hz - signed, signed - high_hz), 0.0)
            rows.append(np.cos(np.pi / 2 * np.minimum(outside_hz / _SLOPE_HZ, 1.0)) ** 2)
        self._own_band = np.array(rows, np.float32)

    def _frames(self, samples: NDArray[np.generic]) -> ComplexBlock:
        cut = sliding_window_view(samples, self._frame, axis=1)[:, :: self._frame // 2]
        spectra: ComplexBlock = scipy.fft.fft(cut * self._window, axis=2)
        return spectra

    def _power(self, half: ComplexBlock, bands: FloatBlock) -> Floats:
        """Power within each channel's message band of the real signal with these positive-frequency spectra."""
        power = (np.square(half.real) + np.square(half.imag)).mean(axis=1, dtype=np.float64)
        return np.asarray((power * bands).sum(axis=1) * (2.0 * self._scale * self._bin_hz))

    def _residue(self, output: ComplexBlock, ideal: ComplexBlock, bands: FloatBlock) -> Floats:
        """Power of what a detector's output has and the ideal, scaled to it, has not; in the ideal's units."""
        band = bands[:, None]
        product = np.einsum("cfk,cfk->c", np.real(output * np.conj(ideal)), np.broadcast_to(band, output.shape))
        share = np.einsum("cfk,cfk->c", np.square(np.abs(ideal)), np.broadcast_to(band, output.shape))
        gain = product / np.maximum(share, _TINY)
        left = self._power(output - gain[:, None, None].astype(np.float32) * ideal, bands)
        return np.asarray(left / np.maximum(gain, 0.1) ** 2)

    def _side_noise(
        self, low: ComplexBlock, high: ComplexBlock, floor: Floats, bands: FloatBlock
    ) -> tuple[Floats, Floats]:
        """Noise in the message from each sideband alone: what the two sidebands do not share, at least the noise."""
        width_hz = bands.sum(axis=1) * self._bin_hz
        scale = self._scale * self._bin_hz
        cells = bands / np.float32(low.shape[1])
        upper = np.einsum("cfk,ck->c", np.square(np.abs(low)), cells) * scale
        lower = np.einsum("cfk,ck->c", np.square(np.abs(high)), cells) * scale
        shared = np.abs(np.einsum("cfk,ck->ck", low * np.conj(high), cells)).sum(axis=1) * scale
        least = floor * width_hz
        # The real part of a doubled sideband: twice the power of the one-sided signal.
        return (
            np.asarray(2.0 * np.maximum(upper - shared, least), dtype=np.float64),
            np.asarray(2.0 * np.maximum(lower - shared, least), dtype=np.float64),
        )

    def _beside(self, channel: PickedChannel, frequency_hz: Floats, usable_hz: float) -> NDArray[np.intp]:
        """Bins of the channel that the emission leaves empty."""
        side, high_hz = int(channel.emission.side or 0), channel.audio_hz[1] + 2 * self._bin_hz
        beyond_hz = (channel.vestige_hz if channel.emission.is_vestigial else 0.0) + 4 * self._bin_hz
        signed = frequency_hz * (side or 1)
        occupied = np.abs(frequency_hz) <= high_hz if side == 0 else (signed >= -beyond_hz) & (signed <= high_hz)
        return np.flatnonzero(~occupied & (np.abs(frequency_hz) <= usable_hz - self._bin_hz))
