"""Short-time spectra of upright channels, and the power of each message and of its noise in them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.emissions import Emission
from rxchain.streams import ComplexBlock, Floats

FRAMES = 16  # in a chunk, half overlapping


@dataclass(frozen=True, slots=True)
class MeteredChannel:
    """What a meter must know of a channel.

    audio_hz : the message's band. vestige_hz : half-width of the vestigial slope. sideband : for double sidebands, which
    is received: both, upper or lower.
    """

    emission: Emission
    audio_hz: tuple[float, float]
    vestige_hz: float = 0.0
    sideband: str = "both"


class MessageSpectra:
    """Power of each message of each channel in a chunk, as its coherent detector would deliver it.

    Each message is the real part of the channel through weights of its own, one a bin: what the detector's taps are to
    the samples. For a double sideband a further row holds the quadrature component, which is noise alone.
    """

    def __init__(self, channels: Sequence[MeteredChannel], rate_hz: float, frame: int) -> None:
        self._rate_hz = rate_hz
        self._window = np.hanning(frame + 1)[:-1].astype(np.float32)
        self._scale = 1.0 / (rate_hz * float(np.sum(self._window.astype(np.float64) ** 2)))
        self.bin_hz = rate_hz / frame
        frequency_hz = scipy.fft.fftfreq(frame, 1.0 / rate_hz)
        half = frame // 2
        self._mirror = -np.arange(half) % frame
        rows = [_weights(channel, frequency_hz) for channel in channels]
        most = max(len(row) for row in rows)
        weights = np.zeros((len(channels), most, frame), np.complex64)
        for k, row in enumerate(rows):
            weights[k, : len(row)] = row
        self.n_messages = np.array([len(c.emission.messages) for c in channels])
        self.is_double: NDArray[np.bool_] = np.array([_is_double(channel) for channel in channels])
        self._direct = weights[:, :, :half]
        self._mirrored = np.conj(weights[:, :, self._mirror])
        power = np.abs(self._direct) ** 2 + np.abs(self._mirrored) ** 2
        # A message's noise power over the channel's noise density: half of each copy's falls on the real part.
        self.noise_bandwidth_hz: Floats = power.sum(axis=2, dtype=np.float64) * self.bin_hz / 2.0
        sidebands = [_sideband_bins(channel, frequency_hz) for channel in channels]
        self._sidebands = np.array(sidebands, dtype=np.float32)
        self.sideband_width_hz: Floats = self._sidebands.sum(axis=1, dtype=np.float64) * self.bin_hz

    def transform(self, frames: NDArray[np.complex64]) -> ComplexBlock:
        """Spectra of ``(channels, frames, samples)``."""
        spectra: ComplexBlock = scipy.fft.fft(frames * self._window, axis=2, overwrite_x=True)
        return spectra

    def density(self, spectra: ComplexBlock) -> NDArray[np.float32]:
        """Power per hertz in each bin, same shape; full scale squared per hertz."""
        power: NDArray[np.float32] = np.square(spectra.real)
        power += np.square(spectra.imag)
        power *= np.float32(self._scale)
        return power

    def message_power(self, spectra: ComplexBlock) -> Floats:
        """Mean power of each row's output over the chunk, noise included, (channels, rows)."""
        powers = np.zeros(self._direct.shape[:2])
        low, high = spectra[:, :, : len(self._mirror)], np.conj(spectra[:, :, self._mirror])
        for row in range(self._direct.shape[1]):
            part = low * self._direct[:, row, None]
            part += high * self._mirrored[:, row, None]
            total = np.einsum("cfk,cfk->c", part.real, part.real) + np.einsum("cfk,cfk->c", part.imag, part.imag)
            powers[:, row] = total
        # |direct + mirrored|^2 / 4 is the two-sided density of the real part; both its halves count.
        return np.asarray(powers * (self._scale * self.bin_hz / 2.0 / spectra.shape[1]))

    def sideband_power(self, density: NDArray[np.float32]) -> Floats:
        """Power in the emission's sidebands, noise included, (channels,)."""
        mean = density.mean(axis=1)
        return np.asarray(np.einsum("cf,cf->c", mean, self._sidebands) * self.bin_hz, dtype=np.float64)


def _is_double(channel: MeteredChannel) -> bool:
    return channel.emission.is_double_sideband and channel.sideband == "both"


def _weights(channel: MeteredChannel, frequency_hz: Floats) -> list[NDArray[np.complex64]]:
    low_hz, high_hz = channel.audio_hz
    up = ((frequency_hz >= low_hz) & (frequency_hz <= high_hz)).astype(np.complex64)
    down = ((-frequency_hz >= low_hz) & (-frequency_hz <= high_hz)).astype(np.complex64)
    both = up + down
    emission = channel.emission
    match emission.family:
        case "A3E" | "DSB-SC":
            if channel.sideband == "both":
                return [both, -1j * both]
            return [2 * (up if channel.sideband == "upper" else down)]
        case "B8E":
            return [up, down]
        case "QAM":
            return [both, -1j * both]
        case "AM-STEREO":
            return [(0.5 - 0.5j) * both, (0.5 + 0.5j) * both]
        case "A1A":
            return [up]
    side = int(emission.side or 1)
    if not emission.is_vestigial:
        return [up if side > 0 else down]
    slope = np.clip(0.5 + 0.5 * side * frequency_hz / max(channel.vestige_hz, 1.0), 0.0, 1.0)
    return [(slope / (slope**2 + (1 - slope) ** 2) * both).astype(np.complex64)]


def _sideband_bins(channel: MeteredChannel, frequency_hz: Floats) -> NDArray[np.bool_]:
    """Bins in which the emission's sidebands lie, the carrier left out."""
    low_hz, high_hz = channel.audio_hz
    bins = (np.abs(frequency_hz) >= low_hz) & (np.abs(frequency_hz) <= high_hz)
    side = channel.emission.side
    if side is None:
        return np.asarray(bins)
    beyond_hz = channel.vestige_hz if channel.emission.is_vestigial else 0.0
    return np.asarray(bins & (int(side) * frequency_hz >= -beyond_hz))
