"""Small signals and measures that several tests share; written apart from the product, so that they can judge it."""

from __future__ import annotations

from typing import Any

import numpy as np


def noise_message(n: int, rate_hz: float, low_hz: float, high_hz: float, seed: int) -> np.ndarray:
    """Gaussian noise that fills a band exactly, peak 1."""
    rng = np.random.default_rng(seed)
    spectrum = np.fft.rfft(rng.standard_normal(n))
    frequency_hz = np.fft.rfftfreq(n, 1 / rate_hz)
    spectrum[(frequency_hz < low_hz) | (frequency_hz > high_hz)] = 0
    message = np.fft.irfft(spectrum, n)
    return message / np.abs(message).max()


def hilbert(message: np.ndarray) -> np.ndarray:
    """The Hilbert transform, by the sign of the frequency."""
    spectrum = np.fft.fft(message)
    return np.real(np.fft.ifft(-1j * np.sign(np.fft.fftfreq(len(message))) * spectrum))


def through(stage: Any, block: np.ndarray) -> np.ndarray:
    """A whole stream through a stage."""
    return np.concatenate([stage.process(block), stage.flush()], axis=-1)


def fit(output: np.ndarray, *known: np.ndarray) -> tuple[np.ndarray, float]:
    """Amplitudes of the known signals in the output, and the power that is neither, over theirs, in dB."""
    basis = np.stack(known, axis=1)
    amplitudes, *_ = np.linalg.lstsq(basis, output, rcond=None)
    left = output - basis @ amplitudes
    return amplitudes, float(10 * np.log10(np.sum(left**2) / np.sum((basis @ amplitudes) ** 2)))


def tone_lines(output: np.ndarray, rate_hz: float, tone_hz: float, orders: int = 6) -> np.ndarray:
    """Amplitudes of a tone and its harmonics, by least squares; index 0 is the mean."""
    t = np.arange(len(output)) / rate_hz
    columns = [np.ones_like(t)]
    for k in range(1, orders + 1):
        columns += [np.cos(2 * np.pi * k * tone_hz * t), np.sin(2 * np.pi * k * tone_hz * t)]
    basis = np.stack(columns, axis=1)
    # Over many periods harmonics are nearly orthogonal: the normal equations are as good as anything, and quick. Their
    # sine at half the rate is nothing but rounding: small singular values are left out.
    amplitudes, *_ = np.linalg.lstsq(basis.T @ basis, basis.T @ output, rcond=1e-9)
    return np.concatenate([amplitudes[:1], np.hypot(amplitudes[1::2], amplitudes[2::2])])


def distortion_percent(lines: np.ndarray) -> float:
    """Total harmonic distortion: root of the harmonics' power over the fundamental."""
    return float(100 * np.sqrt(np.sum(lines[2:] ** 2)) / lines[1])
