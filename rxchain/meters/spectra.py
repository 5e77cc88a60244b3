"""Short-time spectra of upright channels, and the power of each message and of its noise in them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.emissions import Emission
from rxchain.streams import ComplexBlock, Floats

FRAMES = 16  # in a chunk, half overlapping
_EDGE_BINS = 1.5  # by which the window smears a message's edges
_CARRIER_BINS = 2.0  # from here on a window leaves nothing of a steady carrier
_PHASE_TOLD = 0.7  # share of a frame's power that must mirror itself before its phase is believed
_CELL_BINS = 4
# Averages that a cell's values are worth: neighbouring bins share their noise, frames overlap by half (all Hann).
_CELL_AVERAGES = FRAMES * _CELL_BINS / (1.05 * (1 + 2 * (4 / 9) * (3 / 4) + 2 * (1 / 36) * (2 / 4)))
_COHERENT = 0.4


@dataclass(frozen=True, slots=True)
class MeteredChannel:
    """What a meter must know of a channel.

    audio_hz : the message's band. vestige_hz : half-width of the vestigial slope. sideband : for double sidebands, which
    is received: both, upper or lower. follows_voice : its offset is what the follower found from the voice.
    """

    emission: Emission
    audio_hz: tuple[float, float]
    vestige_hz: float = 0.0
    sideband: str = "both"
    follows_voice: bool = False


class MessageSpectra:
    """Power of each message of each channel in a chunk, as its coherent detector would deliver it.

    Each message is the real part of the channel through weights of its own, one a bin: what the detector's taps are to
    the samples. For a double sideband a further row holds the quadrature component, which is noise alone. The bins reach
    a little beyond the message's band, because the window smears what lies at its edges.
    """

    def __init__(self, channels: Sequence[MeteredChannel], rate_hz: float, frame: int) -> None:
        self._window = np.hanning(frame + 1)[:-1].astype(np.float32)
        self._gain = 1.0 / float(np.sum(self._window))
        self._scale = 1.0 / (rate_hz * float(np.sum(self._window.astype(np.float64) ** 2)))
        self.bin_hz = rate_hz / frame
        frequency_hz = scipy.fft.fftfreq(frame, 1.0 / rate_hz)
        half = frame // 2
        self._mirror = -np.arange(half) % frame
        self.n_messages = np.array([len(c.emission.messages) for c in channels])
        self.is_double: NDArray[np.bool_] = np.array([_is_double(channel) for channel in channels])
        self._direct, self._mirrored = self._copies(
            [_wider(channel, self.bin_hz) for channel in channels], frequency_hz
        )
        self._has_cross = bool((np.abs(self._direct * self._mirrored) > 0).any())
        self._weighed: Floats = np.abs(self._direct) ** 2
        self._weighed_mirrored: Floats = np.abs(self._mirrored) ** 2
        # A message's noise power over the channel's noise density: half of each copy's falls on the real part.
        self.width_with_edges_hz: Floats = (self._weighed + self._weighed_mirrored).sum(axis=2) * self.bin_hz / 2.0
        direct, mirrored = self._copies(channels, frequency_hz)
        widths_hz = (np.abs(direct) ** 2 + np.abs(mirrored) ** 2).sum(axis=2) * self.bin_hz / 2.0
        # Whole bins do not quite make up the band.
        bins = np.array([_covered_hz(channel.audio_hz, self.bin_hz) for channel in channels])
        self.noise_bandwidth_hz: Floats = widths_hz * (_widths_hz(channels) / bins)[:, None]
        self._last_bin = int(np.flatnonzero((self._weighed + self._weighed_mirrored).any(axis=(0, 1))).max()) + 1
        sidebands = [_sideband_bins(channel, self.bin_hz, frequency_hz) for channel in channels]
        self._sidebands = np.array(sidebands, dtype=np.float64)
        self.sideband_width_hz: Floats = self._sidebands.sum(axis=1) * self.bin_hz

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

    def amplitude(self, spectra: ComplexBlock) -> Floats:
        """Mean amplitude on the real axis, (channels,); the frames' slopes keep the message out of it."""
        return np.asarray(spectra[:, :, 0].real.mean(axis=1, dtype=np.float64) * self._gain)

    def message_power(self, spectra: ComplexBlock, density: NDArray[np.float32], mean: Floats) -> tuple[Floats, Floats]:
        """Mean power of each row's output over the chunk, noise and edges included, (channels, rows).

        The second figure, (channels,), is the power of a message that had leaked into the quadrature component and was
        taken out of it. mean : the densities' mean over the frames. |a X(f) + b X*(-f)|^2 / 4 is the two-sided density of
        the real part, and both its halves count.
        """
        n = self._last_bin
        upper, lower = mean[:, :n], mean[:, self._mirror[:n]]
        rows = self._weighed[:, :, :n] * upper[:, None] + self._weighed_mirrored[:, :, :n] * lower[:, None]
        leaked = np.zeros(len(rows))
        if self._has_cross:
            cross, before = self._cross(spectra, density)
            rows += 2.0 * np.real(self._direct[:, :, :n] * np.conj(self._mirrored[:, :, :n]) * cross[:, None])
            double = np.flatnonzero(self.is_double)
            if len(double):
                whole = rows[double, 1] + 2.0 * np.real(cross - before)[double] * self._weighed[double, 1, :n]
                rows[double, 1] *= _noise_share(upper[double], lower[double], cross[double])
                leaked[double] = np.abs((whole - rows[double, 1]).sum(axis=1))
        return rows.sum(axis=2) * (self.bin_hz / 2.0), leaked * (self.bin_hz / 2.0)

    def _cross(
        self, spectra: ComplexBlock, density: NDArray[np.float32]
    ) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Mean of X(f) X(-f) over the frames, (channels, bins), in units of density: turned, and as it is.

        A double sideband's is real once its phase is right: what is left of the phase is taken out frame by frame where
        enough of the frame's power tells it.
        """
        n = self._last_bin
        products = spectra[:, :, :n] * spectra[:, :, self._mirror[:n]]
        before = np.asarray(products.mean(axis=1, dtype=np.complex128) * self._scale)
        if self.is_double.any():
            total = products.sum(axis=2) - products[:, :, 0] / 2
            power = density[:, :, :n].sum(axis=2) + density[:, :, -n + 1 :].sum(axis=2)
            strength = np.abs(total)
            told = (2.0 * self._scale * strength > _PHASE_TOLD * power) & self.is_double[:, None]
            turn = np.where(told, np.conj(total) / np.maximum(strength, 1e-30), 1.0).astype(np.complex64)
            products *= turn[:, :, None]
            return np.asarray(products.mean(axis=1, dtype=np.complex128) * self._scale), before
        return before, before

    def sideband_power(self, mean: Floats) -> Floats:
        """Power in the emission's sidebands, noise included, (channels,); from densities averaged over the frames."""
        return np.asarray(np.einsum("cf,cf->c", mean, self._sidebands) * self.bin_hz)

    def _copies(
        self, channels: Sequence[MeteredChannel], frequency_hz: Floats
    ) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
        """Each row's weights of the bins from 0 Hz up, and those of their mirror images, (channels, rows, bins)."""
        rows = [_weights(channel, frequency_hz) for channel in channels]
        weights = np.zeros((len(rows), max(len(row) for row in rows), len(frequency_hz)), np.complex128)
        for k, row in enumerate(rows):
            weights[k, : len(row)] = row
        return weights[:, :, : len(self._mirror)], np.conj(weights[:, :, self._mirror])


def _noise_share(upper: Floats, lower: Floats, cross: NDArray[np.complex128]) -> Floats:
    """How much of the quadrature component is noise in each bin, and not a message that has leaked into it.

    Unequal sidebands, as selective fading makes them, put the message into the quadrature component too: what follows
    the in-phase component there, in cells of a few bins, is no noise. It is looked for only where the sidebands are
    coherent; a neighbour's signal is in one of them alone. (channels, bins), like the arguments: densities on either
    side, and X(f) X(-f).
    """
    first = int(_CARRIER_BINS)  # with the carrier in it a cell would tell of nothing else
    inside = slice(first, first + (upper.shape[1] - first) // _CELL_BINS * _CELL_BINS)
    shape = (len(upper), -1, _CELL_BINS)
    high, low, product = (one[:, inside].reshape(shape).mean(axis=2) for one in (upper, lower, cross))
    in_phase = np.maximum(high + low + 2.0 * product.real, 1e-300)
    quadrature = np.maximum(high + low - 2.0 * product.real, 1e-300)
    common = ((high - low) ** 2 + (2.0 * product.imag) ** 2) / in_phase
    spare = 1.0 / (_CELL_AVERAGES - 1.0)  # of the noise follows anything by chance
    left = np.maximum(quadrature - common, 0.0) * (1.0 + spare)
    slope2 = np.maximum(common - left * spare, 0.0) / in_phase
    coherent = np.abs(product) ** 2 > _COHERENT * high * low
    share = np.ones(upper.shape)
    share[:, inside] = np.repeat(np.where(coherent, left / (1.0 + slope2) / quadrature, 1.0), _CELL_BINS, axis=1)
    return share


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


def _sideband_bins(channel: MeteredChannel, bin_hz: float, frequency_hz: Floats) -> NDArray[np.bool_]:
    """Bins in which the emission's sidebands lie, edges included, the carrier left out."""
    low_hz, high_hz = _wider(channel, bin_hz).audio_hz
    bins = (np.abs(frequency_hz) >= low_hz) & (np.abs(frequency_hz) <= high_hz)
    side = channel.emission.side
    if side is None:
        return np.asarray(bins)
    beyond_hz = channel.vestige_hz if channel.emission.is_vestigial else 0.0
    return np.asarray(bins & (int(side) * frequency_hz >= -beyond_hz))


def _wider(channel: MeteredChannel, bin_hz: float) -> MeteredChannel:
    low_hz, high_hz = channel.audio_hz
    least_hz = min(low_hz, _CARRIER_BINS * bin_hz)
    return replace(channel, audio_hz=(max(low_hz - _EDGE_BINS * bin_hz, least_hz), high_hz + _EDGE_BINS * bin_hz))


def _covered_hz(band_hz: tuple[float, float], bin_hz: float) -> float:
    low_hz, high_hz = band_hz
    return float(max(np.floor(high_hz / bin_hz) - np.ceil(low_hz / bin_hz) + 1.0, 1.0) * bin_hz)


def _widths_hz(channels: Sequence[MeteredChannel]) -> Floats:
    return np.array([channel.audio_hz[1] - channel.audio_hz[0] for channel in channels])
