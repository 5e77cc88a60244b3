"""Messages to learn from: recorded voices made various, music and noise made from scratch, tones that stand for seconds."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import Floats
from rxchain.synthesis.messages import band_limited, resampled

RATE_HZ = 24_000.0  # messages and emissions are made here and brought to the channel's rate afterwards
_SPEED = (0.82, 1.22)
_ROOM_S = (0.02, 0.35)
_BACKGROUND_DB = (20.0, 55.0)


class Material:
    """Draws messages: float64, (samples,), peak 1, by the generator it is given."""

    def __init__(self, recordings: Sequence[Path]) -> None:
        import soundfile

        self._recordings: list[Floats] = []
        for path in recordings:
            samples, rate_hz = soundfile.read(path, dtype="float64", always_2d=True)
            mono = samples.mean(axis=1)
            self._recordings.append(resampled(mono, 2 * round(len(mono) * RATE_HZ / rate_hz / 2)))

    def draw(self, n: int, band_hz: tuple[float, float], rng: np.random.Generator) -> Floats:
        """A message of ``n`` samples within the band: seven in ten are voices."""
        kind = rng.random()
        if kind < 0.72:
            samples = self._voice(n, rng)
        elif kind < 0.84:
            samples = _music(n, rng)
        elif kind < 0.93:
            samples = rng.standard_normal(n) * _syllables(n, rng)
        else:
            samples = _signals(n, rng) + 0.02 * self._voice(n, rng)
        limited = band_limited(samples, RATE_HZ, band_hz)
        return np.asarray(limited / np.max(np.abs(limited)))

    def plain(self, n: int, band_hz: tuple[float, float], rng: np.random.Generator) -> Floats:
        """A stretch of a recording as it is, repeated to fill the time."""
        recording = self._recordings[rng.integers(len(self._recordings))]
        limited = band_limited(np.resize(np.roll(recording, -int(rng.integers(len(recording)))), n), RATE_HZ, band_hz)
        return np.asarray(limited / np.max(np.abs(limited)))

    def signal(self, n: int, band_hz: tuple[float, float], rng: np.random.Generator) -> Floats:
        """Tones that stand for seconds, ticks, and a recording far below them."""
        limited = band_limited(_signals(n, rng) + 0.02 * self.plain(n, band_hz, rng), RATE_HZ, band_hz)
        return np.asarray(limited / np.max(np.abs(limited)))

    def _voice(self, n: int, rng: np.random.Generator) -> Floats:
        """A stretch of a voice at another speed, with another tone, in a room, before some background."""
        voice = self._recordings[rng.integers(len(self._recordings))]
        speed = rng.uniform(*_SPEED)
        length = min(next_smooth(int(n * speed)), len(voice))
        for _ in range(8):
            first = rng.integers(len(voice) - length + 1)
            part = voice[first : first + length]
            if np.sqrt(np.mean(part**2)) > 0.3 * np.sqrt(np.mean(voice**2)):
                break
        changed = np.resize(resampled(part, next_smooth(round(length / speed))), n)
        tilt = rng.uniform(-0.6, 0.6)  # a pole or zero: some microphones are dull, others sharp
        changed = changed[:] + tilt * np.concatenate([[0.0], changed[:-1]])
        if rng.random() < 0.5:
            decay = int(rng.uniform(*_ROOM_S) * RATE_HZ)
            room = rng.standard_normal(decay) * np.exp(-5.0 * np.arange(decay) / decay)
            room *= 0.5 / np.sqrt(np.sum(room**2))
            size = next_smooth(n + decay)
            echo = np.fft.irfft(np.fft.rfft(changed, size) * np.fft.rfft(room, size), size)[:n]
            changed = changed + echo
        if rng.random() < 0.5:  # compressed before the transmitter
            changed = np.tanh(changed / np.sqrt(np.mean(changed**2)) * rng.uniform(0.5, 1.5))
        level = np.sqrt(np.mean(changed**2)) * 10.0 ** (-rng.uniform(*_BACKGROUND_DB) / 20.0)
        return np.asarray(changed + level * rng.standard_normal(n))


def _music(n: int, rng: np.random.Generator) -> Floats:
    """Chords of harmonic notes that change a few times a second, with a beat of noise under them."""
    t = np.arange(n) / RATE_HZ
    music = np.zeros(n)
    beat_s = rng.uniform(0.2, 0.7)
    for start_s in np.arange(0.0, n / RATE_HZ, beat_s):
        at = (t >= start_s) & (t < start_s + 1.5)
        since = t[at] - start_s
        decay = np.exp(-since / rng.uniform(0.15, 0.8)) * np.minimum(since / 0.005, 1.0)
        for _ in range(rng.integers(1, 4)):
            pitch_hz = 110.0 * 2.0 ** (rng.integers(0, 36) / 12.0)
            for harmonic in range(1, rng.integers(3, 10)):
                phase = rng.uniform(0, 2 * np.pi)
                music[at] += decay / harmonic * np.cos(2 * np.pi * harmonic * pitch_hz * since + phase)
        drum = np.exp(-since / 0.05) * rng.standard_normal(len(since))
        music[at] += rng.uniform(0.0, 1.5) * drum
    return music


def _syllables(n: int, rng: np.random.Generator) -> Floats:
    """A swing of the level a few times a second, or none."""
    if rng.random() < 0.4:
        return np.ones(n)
    steps = np.abs(rng.standard_normal(int(n / RATE_HZ * rng.uniform(3, 9)) + 3))
    return np.interp(np.linspace(0, len(steps) - 1, n), np.arange(len(steps)), steps)


def _signals(n: int, rng: np.random.Generator) -> Floats:
    """Tones that stand for seconds, ticks and pauses, as of a time signal or a calling tone."""
    t = np.arange(n) / RATE_HZ
    at_hz = rng.uniform(300.0, 2_000.0, rng.integers(1, 3))
    tones = np.sum([np.cos(2 * np.pi * f * t) for f in at_hz], axis=0)
    period_s, on_s = rng.choice([1.0, 2.0, 0.5]), rng.uniform(0.1, 1.0)
    ticks = (t % 1.0 < 0.005) * np.cos(2 * np.pi * 1_000.0 * t)
    return np.asarray(tones * ((t + rng.uniform(0, 1)) % period_s < on_s * period_s) + 2.0 * ticks)
