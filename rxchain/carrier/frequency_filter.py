"""Kalman filters for the phase, frequency and drift of many lines at once.

State: phase in cycles, frequency in Hz, drift in Hz/s, driven by white jerk (Y. Bar-Shalom, X. R. Li, T. Kirubarajan,
"Estimation with Applications to Tracking and Navigation", 2001, section 6.2.3). The measurement is the quadrature of
the block sums over the amplitude of the moment, which also sets how much it counts: in a fade or a pause the gain
falls, the covariance grows, and the frequency is carried on as on a flywheel. No schedule of bandwidths is needed: the
noise bandwidth comes out as 0.8 Hz at a C/N0 of 15 dB-Hz and 4.6 Hz at 60.
"""

from __future__ import annotations

import numpy as np

from rxchain.carrier.phasor import unit_phasor
from rxchain.streams import Bools, ComplexBlock, Floats

JERK = 5e-4  # (Hz/s)^2/s
_PROMPT_MEMORY_HOPS = 10  # of the short-term amplitude
_PROMPT_NOISE = 0.1  # twice the share of one hop's noise power that the short-term amplitude carries
_PHASE_VARIANCE = 0.02  # cycles^2
_SHIFTED = (_PHASE_VARIANCE, 0.0, 0.0, 1.0, 0.0, 16.0)  # of a line whose frequency was found wrong
_FADING = (_PHASE_VARIANCE, 0.0, 0.0, 1.0, 0.0, 1.0)  # of a line that fades too fast for the filter
_PHASE_CEILING = 1.0  # cycles squared: the phase is as good as unknown
_PULL_PER_S = 2.0  # in fast fading: how quickly the frequency goes to the lag product's
_CLEAR = 4.0  # a quantum's power over a hop's noise power from which its angle is believed
_TINY = 1e-300


class FrequencyFilter:
    """Phase, frequency and drift of each channel's line, one step a quantum: the bandwidth is far under its rate."""

    def __init__(self, n_channels: int, hops: int, hop_s: float, steepest_hz_s: float) -> None:
        self._hops, self._step_s, self._steepest = hops, hops * hop_s, steepest_hz_s
        self._before_s = hop_s * np.arange(hops - 1, -1, -1)  # of each hop, before the newest
        self._prompt_gain = 1.0 - (1.0 - 1.0 / _PROMPT_MEMORY_HOPS) ** hops
        self.frequency_hz: Floats = np.zeros(n_channels)
        self.drift_hz_s: Floats = np.zeros(n_channels)
        self.phase_cycles: Floats = np.zeros(n_channels)
        self._prompt = np.zeros(n_channels, np.complex128)
        self._p: tuple[Floats, ...] = tuple(np.zeros(n_channels) for _ in range(6))

    def start(
        self,
        channel: int,
        phase_cycles: float,
        frequency_hz: float,
        drift_hz_s: float,
        phase_variance: float,
        covariance: tuple[float, float, float],
        amplitude: float,
    ) -> None:
        """Take up a line as it is at the newest hop; the covariance is that of frequency and drift."""
        self.phase_cycles[channel] = phase_cycles
        self.frequency_hz[channel] = frequency_hz
        self.drift_hz_s[channel] = drift_hz_s
        self._prompt[channel] = amplitude
        for p, start in zip(self._p, (phase_variance, 0.0, 0.0, *covariance), strict=True):
            p[channel] = start

    def stop(self, channels: Bools) -> None:
        """Let go of lines: back to the nominal frequency."""
        self.frequency_hz[channels] = 0.0
        self.drift_hz_s[channels] = 0.0

    def shift(self, channels: Bools, shift_hz: Floats) -> None:
        """Move frequencies found wrong, once."""
        self.frequency_hz[channels] += shift_hz[channels]
        self._restart(channels, _SHIFTED)

    def follow(self, sums: ComplexBlock, noise: Floats, active: Bools, fast: Bools, lag_hz: Floats) -> Floats:
        """Go through a quantum of block sums; the frequency used on the way to each hop, ``(channels, hops)``, Hz.

        noise : noise power of one block sum. active : channels with a line to follow.
        fast : where the frequency goes to ``lag_hz``, the lag product's, instead of by the filter.
        """
        if fast.any():
            self._restart(fast, _FADING)
        self._predict(fast, lag_hz)
        # On the way to a hop the frequency was that of half a hop before.
        half_hop_s = 0.5 * self._step_s / self._hops
        used_hz = self.frequency_hz[:, None] - self.drift_hz_s[:, None] * (self._before_s + half_hop_s)
        self._correct(sums, noise, active, fast)
        return used_hz

    def _restart(self, channels: Bools, covariance: tuple[float, ...]) -> None:
        for p, start in zip(self._p, covariance, strict=True):
            p[channels] = start

    def _predict(self, fast: Bools, lag_hz: Floats) -> None:
        t = self._step_s
        p00, p01, p02, p11, p12, p22 = self._p
        p00 = p00 + t * (2.0 * p01 + t * (p02 + p11 + t * (p12 + 0.25 * t * p22)))
        p01 = p01 + t * (p02 + p11 + t * (1.5 * p12 + 0.5 * t * p22))
        p02 = p02 + t * (p12 + 0.5 * t * p22)
        p11 = p11 + t * (2.0 * p12 + t * p22)
        p12 = p12 + t * p22
        p22 = p22 + JERK * t
        self._p = (p00, p01, p02, p11, p12, p22)
        self.phase_cycles += t * (self.frequency_hz + 0.5 * t * self.drift_hz_s)
        self.drift_hz_s *= 1.0 - t * fast
        self.frequency_hz += t * (self.drift_hz_s + _PULL_PER_S * fast * lag_hz)

    def _correct(self, sums: ComplexBlock, noise: Floats, active: Bools, fast: Bools) -> None:
        phase = self.phase_cycles[:, None] - self.frequency_hz[:, None] * self._before_s
        z = np.mean(sums * unit_phasor(-phase), axis=1, dtype=np.complex128)
        self._prompt += self._prompt_gain * (z - self._prompt)
        power = self._prompt.real**2 + self._prompt.imag**2 - _PROMPT_NOISE * noise
        counts = active & (power > 0.0)
        power = np.maximum(power, _TINY)
        # In noise the quadrature is the better measure, up to a radian; clear of it, the angle.
        quadrature = np.clip(z.imag / np.sqrt(power), -1.0, 1.0)
        now = z.real**2 + z.imag**2
        clear = now > _CLEAR * noise
        error = np.where(clear, np.angle(z), quadrature) / (2.0 * np.pi)
        p00, p01, p02, p11, p12, p22 = self._p
        # An angle is worth what the line is worth at that moment, be it the edge of a deep fade.
        variance = noise / (self._hops * 8.0 * np.pi**2) / np.where(clear, np.minimum(power, now), power)
        weight = np.where(counts, 1.0 / (p00 + variance + _TINY), 0.0)
        # In fast fading the phase alone follows, to be right when the filter has its frequency back.
        slow = ~fast
        k0, k1, k2 = p00 * weight, p01 * weight * slow, p02 * weight * slow
        self.phase_cycles += k0 * error
        self.frequency_hz += k1 * error
        self.drift_hz_s = np.clip(self.drift_hz_s + k2 * error, -self._steepest, self._steepest)
        updated = (p00 - k0 * p00, p01 - k0 * p01, p02 - k0 * p02, p11 - k1 * p01, p12 - k1 * p02, p22 - k2 * p02)
        scale = _PHASE_CEILING / np.maximum(updated[0], _PHASE_CEILING)
        self._p = tuple(p * scale for p in updated)
