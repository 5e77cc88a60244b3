"""What each detector that could serve would give now: message, noise and distortion of its output, from the channel itself.

The channel is turned once more by its own carrier's phase over the shortest window that leaves the message alone. What
the real part of that gives is the message as it should be; the envelope and the tracked real part are compared with it,
and whatever they do not share is distortion of theirs. Noise is what the two sidebands do not share (double sideband) or
what lies beside the emission (one sideband).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias, TypeVar

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from rxchain.emissions import Emission
from rxchain.streams import ComplexBlock, FloatBlock, Floats

COHERENT, ENVELOPE, UPPER, LOWER = range(4)
DETECTORS = ("coherent", "envelope", "upper", "lower")

_TINY = 1e-30
_SLOPE_HZ = 300.0  # of the envelope detector's own band
_CARRIER_HZ = 50.0  # that band's reach onto an empty side
# Carrier over noise in the short window, below which turning by it would do harm.
_TRUST_CARRIER = 10.0**2.5
_CELL_BINS = 8  # 250 Hz: fading is even across a cell, of these bins and a whole step
_INDEPENDENT = 0.5  # share of a cell's values that count as independent, with Hann windows half overlapped
_LEAST = 1e-3  # of a sideband's power is taken for message, whatever the noise says


T = TypeVar("T", np.float32, np.float64, np.complex64)
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
    """Of one step, for some channels: float64, (channels, 4), for coherent, envelope, upper and lower in this order.

    message, noise, distortion : powers of what each detector's output would hold, in the channel's own units.
    carrier_to_noise_density : (channels,), hertz.
    deepest : (channels,), lowest value of the real part over the carrier (under 0: over-modulated as received).
    sideways : (channels,), largest value of the imaginary part over the carrier: what noise alone may do.
    """

    message: Floats
    noise: Floats
    distortion: Floats
    carrier_to_noise_density: Floats
    deepest: Floats
    sideways: Floats


class Predictor:
    """Predicts for a group of channels, one step of samples at a time.

    overlap : samples before a step that :meth:`predict` must be given as well.
    """

    def __init__(self, channels: Sequence[PickedChannel], rate_hz: float, usable_hz: float, frame: int) -> None:
        self._channels, self._rate_hz, self._frame = tuple(channels), rate_hz, frame
        lowest_hz = np.array([max(channel.audio_hz[0], 50.0) for channel in channels])
        longest = round(2.0 / float(lowest_hz.min()) * rate_hz) | 1
        # Neither the short window nor the ringing of the own band's slopes may reach over a window's ends.
        self._margin = max(longest // 2, round(2.0 / _SLOPE_HZ * rate_hz))
        self.overlap = 2 * self._margin + frame
        self._kernels = np.zeros((len(channels), longest))
        for row, low_hz in enumerate(lowest_hz):
            # A Hann window whose first null is the lowest frequency of the message.
            n = round(2.0 / low_hz * rate_hz) | 1
            hann = np.hanning(n + 2)[1:-1]
            self._kernels[row, longest // 2 - n // 2 : longest // 2 + n // 2 + 1] = hann / hann.sum()
        self._kernel_response = np.zeros((len(channels), 0), np.complex64)
        self._own_band = np.zeros((len(channels), 0), np.float32)
        self._kernel_noise_hz = rate_hz * (self._kernels**2).sum(axis=1)
        self._bin_hz = rate_hz / frame
        positive_hz = np.asarray(np.arange(frame // 2) * self._bin_hz, dtype=np.float64)
        self._sides = np.array([int(channel.emission.side or 0) for channel in channels])
        # Where each channel's message lies above the carrier and below it.
        self._bands = np.array([[_reach(c, side, positive_hz) for side in (1, -1)] for c in channels], np.float32)
        self._window = np.hanning(frame + 1)[:-1].astype(np.float32)
        self._scale = 1.0 / (rate_hz * float((self._window.astype(np.float64) ** 2).sum()))
        self._quiet = np.array([self._beside(channel, usable_hz) for channel in channels])

    def predict(self, window: ComplexBlock, rows: Rows) -> Prediction:
        """From a step of upright samples of some channels, (rows, overlap + step); the prediction is of those alone."""
        own, carrier = self._own_and_carrier(window, rows)
        strength = np.abs(carrier)
        turn = np.asarray(np.conj(carrier) / np.maximum(strength, _TINY), dtype=np.complex64)
        inner = window[:, self._margin : window.shape[1] - self._margin]
        above, below = self._halves(inner * turn)
        floor = self._floor(above, below, rows)
        carrier_power = strength.mean(axis=1, dtype=np.float64) ** 2
        doubted = np.flatnonzero(carrier_power <= _TRUST_CARRIER * self._kernel_noise_hz[rows] * floor)
        if len(doubted):
            turn[doubted] = 1.0
            above[doubted], below[doubted] = self._halves(inner[doubted])
        bands = self._bands[rows]
        above *= bands[:, None, 0]
        below *= bands[:, None, 1]
        magnitude = np.abs(own)
        magnitude -= magnitude.mean(axis=1, keepdims=True)
        # Two real signals in one transform: the tracked real part, and the envelope.
        plus, minus = self._halves(np.asarray(own.real + 1j * magnitude, dtype=np.complex64))
        ideal, inside = (above + below) / 2.0, bands.max(axis=1)[:, None]
        coherent_extra = self._left_over((plus + minus) / 2.0 * inside, ideal)
        envelope_extra = self._left_over((plus - minus) / np.complex64(2j) * inside, ideal)
        one_sided = self._sides[rows] != 0
        message, noise = self._shared(above, below, floor, bands)
        total = self._power(ideal)
        beside = floor * bands.sum(axis=(1, 2)) * (self._bin_hz / 2.0)
        noise[one_sided, :ENVELOPE] = beside[one_sided, None]
        message[one_sided, :ENVELOPE] = np.maximum(total - beside, _LEAST * total)[one_sided, None]
        message[:, ENVELOPE], noise[:, ENVELOPE] = message[:, COHERENT], noise[:, COHERENT]
        distortion = np.stack([coherent_extra, envelope_extra, coherent_extra, coherent_extra], axis=1)
        mean_carrier = np.sqrt(np.maximum(carrier_power, _TINY))
        upright = own * turn
        return Prediction(
            message, noise, distortion, carrier_power / np.maximum(floor, _TINY),
            np.asarray(upright.real.min(axis=1) / mean_carrier, dtype=np.float64),
            np.asarray(np.abs(upright.imag).max(axis=1) / mean_carrier, dtype=np.float64),
        )  # fmt: skip

    def _own_and_carrier(self, window: ComplexBlock, rows: Rows) -> tuple[ComplexBlock, ComplexBlock]:
        """What the envelope detector sees, the emission's own band and nothing of its neighbours; and the carrier."""
        inner = slice(self._margin, window.shape[1] - self._margin)
        lag = self._kernels.shape[1] // 2
        length = scipy.fft.next_fast_len(window.shape[1] + 2 * lag)
        if self._kernel_response.shape[1] != length:
            self._prepare(length)
        spectrum = scipy.fft.fft(window, length, axis=1)
        carrier = scipy.fft.ifft(spectrum * self._kernel_response[rows], axis=1)
        carrier = carrier[:, inner.start + lag : inner.stop + lag]
        own = scipy.fft.ifft(spectrum * self._own_band[rows], axis=1)[:, inner]
        return own, carrier

    def _prepare(self, length: int) -> None:
        """Responses at a transform's bins: the short window's, and the emission's band with 300 Hz slopes."""
        self._kernel_response = scipy.fft.fft(self._kernels, length, axis=1).astype(np.complex64)
        frequency_hz = scipy.fft.fftfreq(length, 1.0 / self._rate_hz)
        rows = []
        for channel in self._channels:
            side, high_hz = int(channel.emission.side or 0), channel.audio_hz[1]
            beyond_hz = channel.vestige_hz if channel.emission.is_vestigial else _CARRIER_HZ
            low_hz = -high_hz if side == 0 else -beyond_hz
            signed = frequency_hz * (side or 1)
            outside_hz = np.maximum(np.maximum(low_hz - signed, signed - high_hz), 0.0)
            rows.append(np.cos(np.pi / 2 * np.minimum(outside_hz / _SLOPE_HZ, 1.0)) ** 2)
        self._own_band = np.array(rows, np.float32)

    def _halves(self, samples: ComplexBlock) -> tuple[ComplexBlock, ComplexBlock]:
        """Short-time spectra above the carrier and, mirrored and conjugated, below it: (rows, frames, bins)."""
        cut = sliding_window_view(samples, self._frame, axis=1)[:, :: self._frame // 2]
        spectra = scipy.fft.fft(cut * self._window, axis=2)
        half = self._frame // 2
        below = np.empty_like(spectra[:, :, :half])
        below[:, :, 0] = spectra[:, :, 0]
        below[:, :, 1:] = spectra[:, :, :half:-1]
        return spectra[:, :, :half], np.conj(below, out=below)

    def _floor(self, above: ComplexBlock, below: ComplexBlock, rows: Rows) -> Floats:
        """Noise density: the middle one of the bins of the channel that the emission leaves empty."""
        density = np.stack([_mean_square(above), _mean_square(below)], axis=1) * self._scale
        quiet = np.where(self._quiet[rows], density, np.nan).reshape(len(rows), -1)
        middle = np.zeros(len(rows))
        some = ~np.isnan(quiet).all(axis=1)
        middle[some] = np.nanmedian(quiet[some], axis=1)
        # The median of a mean of n squares lies under it by one part in 3 n.
        return np.asarray(middle / (1.0 - 1.0 / (3.0 * above.shape[1])), dtype=np.float64)

    def _power(self, half: ComplexBlock) -> Floats:
        """Power of the real signal with these positive-frequency spectra."""
        return np.asarray(_mean_square(half).sum(axis=1) * (2.0 * self._scale * self._bin_hz))

    def _left_over(self, output: ComplexBlock, ideal: ComplexBlock) -> Floats:
        """Power of what a detector's output has and the ideal, scaled to it, has not; in the ideal's units."""
        product = np.einsum("cfk,cfk->c", output.real, ideal.real) + np.einsum("cfk,cfk->c", output.imag, ideal.imag)
        share = np.einsum("cfk,cfk->c", ideal.real, ideal.real) + np.einsum("cfk,cfk->c", ideal.imag, ideal.imag)
        gain = product / np.maximum(share, _TINY)
        left = self._power(output - gain[:, None, None].astype(np.float32) * ideal)
        return np.asarray(left / np.maximum(gain, 0.1) ** 2, dtype=np.float64)

    def _shared(
        self, above: ComplexBlock, below: ComplexBlock, floor: Floats, bands: FloatBlock
    ) -> tuple[Floats, Floats]:
        """Message and noise of both sidebands together and of each alone, (rows, 4), the second left 0.

        In cells of some bins by the whole step. What the sidebands share is message; where one has more than can be
        shared it has faded less. The rest is noise and interference, never under the floor.
        """
        n_bins = _cells(bands.min(axis=1))
        upper, lower = (_cells(_mean_square(half)) * self._scale for half in (above, below))
        cross = _cells(np.einsum("cfk,cfk->ck", above, np.conj(below))) * (self._scale / above.shape[1])
        least = floor[:, None] * n_bins
        count = np.maximum(_INDEPENDENT * above.shape[1] * n_bins, 2.0)
        squared = np.maximum((count * np.abs(cross) ** 2 - upper * lower) / (count - 1.0), 0.0)
        most_upper, most_lower = (np.maximum(side - least, _LEAST * side) for side in (upper, lower))
        shared = np.sqrt(squared)
        # A message that is as strong on both sides shares no more than the weaker side has; one that has faded on one of
        # them shares the geometric mean. Whichever is nearer.
        weaker = np.minimum(most_upper, most_lower)
        unequal = shared > (weaker + np.sqrt(most_upper * most_lower)) / 2.0
        in_upper = np.where(unequal, np.minimum(squared / np.maximum(most_lower, _TINY), most_upper), shared)
        in_lower = np.where(unequal, np.minimum(squared / np.maximum(most_upper, _TINY), most_lower), shared)
        noise_upper, noise_lower = (
            np.maximum((side - inside).sum(axis=1), least.sum(axis=1))
            for side, inside in ((upper, in_upper), (lower, in_lower))
        )
        cosine = cross.real / np.maximum(np.abs(cross), _TINY)
        both = (in_upper + in_lower + 2.0 * np.sqrt(in_upper * in_lower) * cosine) / 4.0
        nothing = np.zeros(len(above))
        message = [both.sum(axis=1), nothing, in_upper.sum(axis=1), in_lower.sum(axis=1)]
        noise = [(noise_upper + noise_lower) / 4.0, nothing, noise_upper, noise_lower]
        return np.stack(message, axis=1) * (2.0 * self._bin_hz), np.stack(noise, axis=1) * (2.0 * self._bin_hz)

    def _beside(self, channel: PickedChannel, usable_hz: float) -> NDArray[np.bool_]:
        """Bins of the channel that the emission leaves empty, above the carrier and below it."""
        side, high_hz = int(channel.emission.side or 0), channel.audio_hz[1] + 2 * self._bin_hz
        beyond_hz = (channel.vestige_hz if channel.emission.is_vestigial else 0.0) + 4 * self._bin_hz
        positive_hz = np.arange(self._frame // 2) * self._bin_hz
        occupied_hz = [high_hz if side in (0, sign) else beyond_hz for sign in (1, -1)]
        usable = positive_hz <= usable_hz - self._bin_hz
        return np.array([usable & (positive_hz > edge_hz) for edge_hz in occupied_hz])


def _reach(channel: PickedChannel, side: int, positive_hz: Floats) -> Floats:
    """1 at the bins of one side at which the coherent detector takes the message, 0 elsewhere."""
    low_hz, high_hz = channel.audio_hz
    if channel.emission.side is not None and channel.emission.side != side:
        high_hz = min(high_hz, channel.vestige_hz) if channel.emission.is_vestigial else 0.0
    return ((positive_hz >= low_hz) & (positive_hz <= high_hz)).astype(float)


def _mean_square(half: ComplexBlock) -> Floats:
    """Over the frames, (rows, bins)."""
    squares = np.einsum("cfk,cfk->ck", half.real, half.real) + np.einsum("cfk,cfk->ck", half.imag, half.imag)
    return np.asarray(squares / half.shape[1], dtype=np.float64)


def _cells(bins: NDArray[T]) -> NDArray[T]:
    """Sums over the bins of each cell."""
    return np.asarray(bins.reshape(len(bins), -1, _CELL_BINS).sum(axis=2))
