"""Spectra of a voice's frames: 64 ms each, half overlapped, of one sideband as if it lay at audio."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import scipy.fft

from rxchain.carrier.history import History
from rxchain.carrier.hops import hop_samples
from rxchain.errors import SettingError
from rxchain.streams import ComplexBlock, Floats

STEP_HOPS = 6  # from one frame to the next, 32 ms
LOW_HZ, HIGH_HZ = 250.0, 2750.0  # audio looked at; the constants of the whole estimate were fitted for this band
_LEAST_RATE_HZ = 6_000.0


class SpeechFrames:
    """Cuts channels into frames that overlap by half, and keeps the spectrum of the side on which the message lies.

    sides : +1 where the message lies above the carrier, -1 below; one a channel. Lower sidebands are mirrored.
    audio_hz : band of each channel's message; bins outside it are 0. A narrower band makes the estimate less sure.

    step_samples : samples from one frame to the next, half a frame. frame_s : a frame's length.
    bin_hz : spacing of the bins. first_bin, n_bins : those kept. frequency_hz : float64, (n_bins,), where they lie.
    """

    def __init__(
        self, n_channels: int, rate_hz: float, sides: Sequence[int], audio_hz: Sequence[tuple[float, float]]
    ) -> None:
        _check(n_channels, rate_hz, sides, audio_hz)
        self.step_samples = STEP_HOPS * hop_samples(rate_hz)
        self._length = 2 * self.step_samples
        self.frame_s = self._length / rate_hz
        self.bin_hz = rate_hz / self._length
        self.first_bin = int(LOW_HZ / self.bin_hz)
        self.n_bins = int(HIGH_HZ / self.bin_hz) - self.first_bin
        self.frequency_hz: Floats = np.asarray((self.first_bin + np.arange(self.n_bins)) * self.bin_hz, np.float64)
        self._is_lower = np.array(sides)[:, None] < 0
        low_hz, high_hz = np.array(audio_hz, np.float64).T[:, :, None]
        self._is_message = (self.frequency_hz >= low_hz) & (self.frequency_hz <= high_hz)
        # The squared sine adds up to one at half overlap, which is what lets the third-order line join the frames.
        self._window = (np.sin(np.pi * (np.arange(self._length) + 0.5) / self._length) ** 2).astype(np.float32)
        self.reset()

    def reset(self) -> None:
        """As new."""
        self._samples = History((len(self._is_lower),), self._length, np.complex64)
        self._is_full = False

    def spectra(self, step: ComplexBlock) -> ComplexBlock | None:
        """Take in ``step_samples`` samples a channel; the newest frame's spectrum, (n_channels, n_bins), once there is one.

        Frames that hold anything but finite numbers come out as silence.
        """
        self._samples.push(step)
        if not self._is_full:
            self._is_full = True
            return None
        spectrum = scipy.fft.fft(self._samples.latest(self._length) * self._window, axis=1, overwrite_x=True)
        upper = spectrum[:, self.first_bin : self.first_bin + self.n_bins]
        lower = spectrum[:, -self.first_bin : -self.first_bin - self.n_bins : -1].conj()
        message = np.where(self._is_message, np.where(self._is_lower, lower, upper), np.complex64(0))
        message[~np.isfinite(message).all(axis=1)] = 0
        return message


def _check(n_channels: int, rate_hz: float, sides: Sequence[int], audio_hz: Sequence[tuple[float, float]]) -> None:
    if not rate_hz >= _LEAST_RATE_HZ:
        raise SettingError("rate_hz", rate_hz, f"a voice's channel needs at least {_LEAST_RATE_HZ:g} samples a second")
    if len(sides) != n_channels or any(side not in (-1, 1) for side in sides):
        raise SettingError("sides", tuple(sides), f"+1 or -1 for each of {n_channels} channels")
    if len(audio_hz) != n_channels or not all(0.0 <= low_hz < high_hz for low_hz, high_hz in audio_hz):
        raise SettingError("audio_hz", tuple(audio_hz), f"a lower and a higher edge for each of {n_channels} channels")
