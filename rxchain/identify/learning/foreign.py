"""Emissions that are not of the family: complex envelopes, mean power 1, at the learning rate."""

from __future__ import annotations

import numpy as np
import scipy.fft

from rxchain.identify.learning.material import RATE_HZ
from rxchain.streams import Floats
from rxchain.synthesis.modulation import Envelope

DATA_BAUD = (31.25, 45.45, 50.0, 75.0, 100.0, 150.0, 200.0, 300.0)


def frequency_modulated(message: Floats, rng: np.random.Generator) -> Envelope:
    """Narrow frequency or phase modulation by a message of peak 1, deviation 1 to 2.5 kHz, or a small index."""
    if rng.random() < 0.35:
        return np.asarray(np.exp(1j * rng.uniform(0.3, 1.5) * message))
    deviation_hz = rng.uniform(1_000.0, 2_500.0)
    return np.asarray(np.exp(2j * np.pi * np.cumsum(deviation_hz * message) / RATE_HZ))


def shift_keyed(n: int, rng: np.random.Generator) -> tuple[Envelope, float]:
    """Two tones at random or alternating symbols; and half the occupied width in hertz."""
    shift_hz, baud = rng.choice([85.0, 170.0, 200.0, 425.0, 450.0, 850.0]), rng.choice(DATA_BAUD[1:])
    symbols = rng.integers(0, 2, int(n / RATE_HZ * baud) + 2)
    tone = symbols[(np.arange(n) * baud / RATE_HZ).astype(np.int64)] - 0.5
    edge = np.hanning(max(3, int(0.2 * RATE_HZ / baud)))
    smooth = np.convolve(tone, edge / edge.sum(), "same")
    return np.exp(2j * np.pi * np.cumsum(shift_hz * smooth) / RATE_HZ), shift_hz / 2 + baud


def phase_keyed(n: int, rng: np.random.Generator) -> tuple[Envelope, float]:
    """Two, four or eight phases through a raised-cosine shape; and half the occupied width."""
    points = rng.choice([2, 2, 4, 8])
    baud = float(rng.choice([31.25, 62.5, 125.0, 600.0, 1_200.0, 2_400.0]))
    count = int(n / RATE_HZ * baud) + 8
    symbols = np.exp(2j * np.pi * rng.integers(0, points, count) / points)
    return _shaped(symbols, n, baud), baud * 0.7


def many_tones(n: int, rng: np.random.Generator) -> tuple[Envelope, float]:
    """Parallel carriers, each with phases of its own; and half the occupied width."""
    carriers = int(rng.integers(8, 53))
    spacing_hz = float(rng.choice([31.25, 46.9, 62.5, 100.0]))
    if carriers * spacing_hz > 3_000.0:
        carriers = int(3_000.0 / spacing_hz)
    baud = spacing_hz * rng.uniform(0.7, 0.95)
    t = np.arange(n) / RATE_HZ
    slots = (t * baud).astype(np.int64)
    total = np.zeros(n, complex)
    for k in range(carriers):
        phases = np.exp(2j * np.pi * rng.integers(0, 4, slots[-1] + 1) / 4)
        total += phases[slots] * np.exp(2j * np.pi * (k - (carriers - 1) / 2) * spacing_hz * t)
    middle_hz = rng.choice([0.0, 1_500.0, -1_500.0])
    turned: Envelope = total * np.exp(2j * np.pi * middle_hz * t)
    return turned, carriers * spacing_hz / 2


def bare_carrier(n: int, rng: np.random.Generator) -> Envelope:
    """A carrier with nothing on it, or with a little hum."""
    hum = rng.choice([0.0, 0.0, 0.005, 0.02])
    t = np.arange(n) / RATE_HZ
    carrier: Envelope = (1.0 + hum * np.cos(2 * np.pi * rng.choice([50.0, 60.0, 100.0, 120.0]) * t)).astype(complex)
    return carrier


def _shaped(symbols: Envelope, n: int, baud: float) -> Envelope:
    """Symbols through a raised-cosine spectrum of 40 % excess bandwidth."""
    size = scipy.fft.next_fast_len(n)
    impulses = np.zeros(size, complex)
    at = (np.arange(len(symbols)) * RATE_HZ / baud).astype(np.int64)
    kept = at < n
    impulses[at[kept]] = symbols[kept]
    frequency = np.abs(scipy.fft.fftfreq(size, 1.0 / RATE_HZ)) / baud
    edge = np.clip((frequency - 0.3) / 0.4, 0.0, 1.0)
    shaped: Envelope = np.fft.ifft(np.fft.fft(impulses) * (0.5 + 0.5 * np.cos(np.pi * edge)))
    return shaped[:n]
