"""What the air does: flat fading, and the two-path channel of short waves.

Two paths of equal mean power, each a complex Gaussian process with a Gaussian Doppler spectrum: C. C. Watterson et al.,
IEEE Trans. Commun. Technol. COM-18 (1970) 792-803. Its parameter sets: Recommendation ITU-R F.1487, where the Doppler
spread is twice the standard deviation of the power spectrum.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

# Condition: delay between the paths in seconds, Doppler spread in hertz.
F1487: dict[str, tuple[float, float]] = {
    "low-latitude quiet": (0.5e-3, 0.5),
    "low-latitude moderate": (2e-3, 1.5),
    "low-latitude disturbed": (6e-3, 10.0),
    "mid-latitude quiet": (0.5e-3, 0.1),
    "mid-latitude moderate": (1e-3, 0.5),
    "mid-latitude disturbed": (2e-3, 1.0),
    "mid-latitude disturbed near-vertical": (7e-3, 1.0),
    "high-latitude quiet": (1e-3, 0.5),
    "high-latitude moderate": (3e-3, 10.0),
    "high-latitude disturbed": (7e-3, 30.0),
}
_GAIN_OVERSAMPLING = 64.0


@dataclass(frozen=True, slots=True)
class Fading:
    """Paths of equal mean power, together 1: ``n_paths`` 1 is flat Rayleigh fading, 2 the short-wave channel."""

    n_paths: int
    delay_s: float
    spread_hz: float


def path_gains(fading: Fading, n: int, rate_hz: float, seed: int) -> NDArray[np.complex128]:
    """Complex gains of the paths, (paths, n); the same for the same seed."""
    rng = np.random.default_rng(seed)
    sigma_hz = fading.spread_hz / 2.0
    # Made at a low rate over a time long against the correlation, so that a short stretch is still a random one.
    low_rate_hz = min(rate_hz, _GAIN_OVERSAMPLING * sigma_hz)
    n_low = int(np.ceil(n * low_rate_hz / rate_hz)) + 2
    length = max(n_low, int(np.ceil(16.0 * low_rate_hz / sigma_hz)))
    frequency_hz = np.fft.fftfreq(length, 1.0 / low_rate_hz)
    shape = np.exp(-(frequency_hz**2) / (4.0 * sigma_hz**2))  # of the amplitude: half the exponent of the power
    shape /= np.sqrt(np.sum(shape**2))
    draws = rng.standard_normal((fading.n_paths, length, 2))
    white = (draws[..., 0] + 1j * draws[..., 1]) / np.sqrt(2.0)
    slow = np.fft.ifft(white * shape, axis=1) * length / np.sqrt(fading.n_paths)
    # At 64 times the Doppler width a straight line between points errs by less than -80 dB.
    at = np.arange(n) * (low_rate_hz / rate_hz)
    base = np.arange(length)
    return np.stack([np.interp(at, base, path.real) + 1j * np.interp(at, base, path.imag) for path in slow])


def faded(envelope: NDArray[np.complex128], fading: Fading, rate_hz: float, seed: int) -> NDArray[np.complex128]:
    """The envelope through the channel; the first path is undelayed, the second comes ``delay_s`` later."""
    gains = path_gains(fading, len(envelope), rate_hz, seed)
    output = gains[0] * envelope
    if fading.n_paths > 1:
        turns = np.fft.fftfreq(len(envelope), 1.0 / rate_hz) * fading.delay_s
        delayed = np.fft.ifft(np.fft.fft(envelope) * np.exp(-2j * np.pi * turns))
        delayed[: round(fading.delay_s * rate_hz)] = 0.0  # before the start there was nothing
        output = output + gains[1] * delayed
    return np.asarray(output)
