"""The squelch: opens where the channel's spectrum shows an emission, not where it is merely loud.

Two statistics of spectra averaged over about 50 ms, both blind to the level of the noise: the density within the
emission's own band over that of the quiet neighbourhood, and the unevenness of the band itself (the logarithm of the
mean less the mean of the logarithms: 0 for flat noise at infinite averaging, large for lines and for speech). Either
opens; it closes a second after both have fallen. Each spectrum is scaled by its own level (that of the neighbourhood where
there is one) before it is averaged, so that a step of the noise moves neither: no frame outweighs the others.
"""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.kernels.overlap_save import Windows
from rxchain.streams import Bools, ComplexBlock, Floats

_FRAME_S, _AVERAGED = 256 / 12_000.0, 4
RATIO_OPEN_DB = 2.6
# Found on two hours of noise as the level crossed 0.3 times an hour (fit of an exponential tail), with some to spare.
UNEVEN_OPEN = 0.36
_HANG_S = 1.0
_LEAST_NEIGHBOURHOOD_HZ = 3_000.0
_GUARD_HZ = 150.0
_SILENCE = np.float32(1e-28)  # power a bin below which there is nothing at all


class Squelch:
    """Open or shut, for a group of channels, at each half frame.

    in_band : bool, (channels, bins): bins of each channel's emission, in transform order; see ``frame_samples``.
    usable_hz : half of the band within which the channel's noise is flat.
    thresholds_db : (channels,): the SNR that opens, in place of the automatic rule; nan for the automatic rule.
    process(iq) : complex64, (channels, n). Returns bool, (channels, steps); step ``s`` covers samples
        ``[s * step_samples, (s + 1) * step_samples)`` and follows from the samples up to its end.
    """

    def __init__(
        self, in_band_hz: list[tuple[tuple[float, float], ...]], rate_hz: float, usable_hz: float, thresholds_db: Floats
    ) -> None:
        self.step_samples = max(16, round(_FRAME_S * rate_hz / 32) * 16)
        self._frame = 2 * self.step_samples
        n = len(in_band_hz)
        frequency_hz = scipy.fft.fftfreq(self._frame, 1.0 / rate_hz)
        usable = np.abs(frequency_hz) <= usable_hz
        self._inside = np.zeros((n, self._frame), np.float32)
        self._outside = np.zeros((n, self._frame), np.float32)
        self._level = np.zeros((n, self._frame), np.float32)
        for row, bands in enumerate(in_band_hz):
            inside = np.zeros(self._frame, bool)
            near = np.zeros(self._frame, bool)
            for low_hz, high_hz in bands:
                inside |= (frequency_hz >= low_hz) & (frequency_hz <= high_hz)
                near |= (frequency_hz >= low_hz - _GUARD_HZ) & (frequency_hz <= high_hz + _GUARD_HZ)
            self._inside[row] = (inside & usable) / max(1, (inside & usable).sum())
            outside = usable & ~near
            self._level[row] = usable / usable.sum()
            if outside.sum() * rate_hz / self._frame >= _LEAST_NEIGHBOURHOOD_HZ:
                self._outside[row] = outside / outside.sum()
                self._level[row] = self._outside[row]
        self._has_neighbourhood = self._outside.any(axis=1)
        self._thresholds_db = thresholds_db
        self._window = np.hanning(self._frame + 1)[:-1].astype(np.float32)
        self._hang = round(_HANG_S * rate_hz / self.step_samples)
        self._windows: Windows[np.complex64] = Windows((n,), self._frame // 2, self._frame // 2, np.complex64)
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        n = len(self._inside)
        self._windows.reset()
        self._recent = np.zeros((_AVERAGED, n, self._frame), np.float32)
        self._sounds = np.zeros((_AVERAGED, n), bool)
        self._frames = 0
        self._received = 0
        self._shut_for = np.full(n, self._hang, np.int64)

    def process(self, iq: ComplexBlock) -> Bools:
        """The decisions that have become complete."""
        steps: list[Bools] = []
        self._received += iq.shape[1]
        while iq.shape[1]:
            window, iq = self._windows.take(iq)
            if window is not None:
                steps.append(self._decide(window))
        return np.stack(steps, axis=1) if steps else np.zeros((len(self._inside), 0), bool)

    def flush(self) -> Bools:
        """One more decision where a step has begun."""
        missing = -self._received % self.step_samples
        return self.process(np.zeros((len(self._inside), missing), np.complex64))

    def _decide(self, window: ComplexBlock) -> Bools:
        spectrum = scipy.fft.fft(window * self._window, axis=1)
        slot = self._recent[self._frames % _AVERAGED]
        np.square(spectrum.real, out=slot)
        slot += np.square(spectrum.imag)
        level = np.einsum("cf,cf->c", slot, self._level)
        slot *= (1.0 / np.maximum(level, _SILENCE))[:, None]
        self._sounds[self._frames % _AVERAGED] = level > _SILENCE
        self._frames += 1
        mean = self._recent[0] + self._recent[1]
        mean += self._recent[2]
        mean += self._recent[3]
        mean += np.float32(1e-30)
        inside = np.einsum("cf,cf->c", mean, self._inside).astype(np.float64)
        outside = np.einsum("cf,cf->c", mean, self._outside).astype(np.float64)
        ratio_db = np.where(self._has_neighbourhood, 10.0 * np.log10(inside / (outside + 1e-30)), -np.inf)
        uneven = np.log(inside) - np.einsum("cf,cf->c", np.log(mean), self._inside)
        automatic = (ratio_db > RATIO_OPEN_DB) | (uneven > UNEVEN_OPEN)
        # The ratio is of signal and noise to noise; without a neighbourhood a set threshold cannot be judged.
        snr = np.where(self._has_neighbourhood, inside / (outside + 1e-30) - 1.0, np.inf)
        asked = 10.0 * np.log10(np.maximum(snr, 1e-9)) > self._thresholds_db
        heard = (
            np.where(np.isnan(self._thresholds_db), automatic, asked)
            & (self._frames >= _AVERAGED)
            & self._sounds.any(axis=0)
        )
        self._shut_for = np.where(heard, 0, self._shut_for + 1)
        return np.asarray(self._shut_for < self._hang)


class Gate:
    """Lets audio through where the squelch is open, with ramps instead of steps.

    process(audio, open_steps) : float32, (channels, messages, n), and the squelch's new decisions. Returns the audio as
        far as the decisions reach, muted where shut; the ramp is 10 ms long.
    """

    def __init__(self, n_channels: int, n_messages: int, step_samples: int, rate_hz: float, always: Bools) -> None:
        self._shape = n_channels, n_messages
        self._step = step_samples
        self._always = always
        ramp = min(step_samples, max(1, round(0.01 * rate_hz)))
        rise = np.ones(step_samples, np.float32)
        rise[:ramp] = 0.5 - 0.5 * np.cos(np.pi * (np.arange(ramp) + 0.5) / ramp)
        self._rise = rise
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        self._was_open = self._always.copy()
        self._gains = np.zeros((self._shape[0], 0), np.float32)
        self._pending = np.zeros((*self._shape, 0), np.float32)

    def process(self, audio: NDArray[np.float32], open_steps: Bools) -> NDArray[np.float32]:
        """The audio as far as it is decided on."""
        gains = [self._gains]
        for step in open_steps.T:
            now = step | self._always
            gain = np.where(
                now[:, None],
                np.where(self._was_open[:, None], np.float32(1), self._rise),
                np.where(self._was_open[:, None], 1 - self._rise, np.float32(0)),
            )
            gains.append(gain.astype(np.float32))
            self._was_open = now
        self._gains = np.concatenate(gains, axis=1)
        self._pending = np.concatenate([self._pending, audio], axis=2)
        n = min(self._gains.shape[1], self._pending.shape[2])
        passed = self._pending[:, :, :n] * self._gains[:, None, :n]
        self._gains, self._pending = self._gains[:, n:], self._pending[:, :, n:]
        return passed
