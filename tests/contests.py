"""Channels in which one detector or another is the best, and the way to hear them through each; written for the picker.

A channel is made at its own rate, with the message known; the product's follower, detectors and switch receive it once
for each detector asked for by hand and once with the picker. What counts is the audio against the message.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from scipy.linalg import solve_toeplitz

from rxchain.carrier.follower import FollowerSettings, make_follower
from rxchain.carrier.track import Turned
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.detector_set import DetectorSet
from rxchain.chain.grouping import kind_of
from rxchain.synthesis.modulation import Modulation, analytic, vestigial_envelope
from rxchain.synthesis.propagation import Fading, faded
from rxchain.tuning.plan import plan_bank

PLAN = plan_bank(192_000.0)
RATE_HZ = 12_000.0
LOW_HZ, HIGH_HZ = 300.0, 3_400.0
VESTIGE_HZ = 850.0
SETTLED_S = 8.0
BLOCK = 6_144  # half a second a call

MakeMessage = Callable[[int, int], np.ndarray]  # samples, seed


@dataclass(frozen=True)
class Contest:
    """A channel, and the message in it; ``fades`` where gains vary and only what is not linear should count."""

    name: str
    channel: str
    iq: np.ndarray
    message: np.ndarray
    fades: bool = False


@dataclass(frozen=True)
class Outcome:
    """SINAD of the audio through each detector by hand, and through the picker; its choices; its last reason."""

    by_hand_db: dict[str, float]
    auto_db: float
    choices: list[str]
    reason: str

    @property
    def best(self) -> str:
        return max(self.by_hand_db, key=self.by_hand_db.__getitem__)

    @property
    def loss_db(self) -> float:
        return self.by_hand_db[self.best] - self.auto_db

    @property
    def changes(self) -> int:
        return sum(a != b for a, b in zip(self.choices, self.choices[1:], strict=False))


def banded(samples: np.ndarray, low_hz: float, high_hz: float) -> np.ndarray:
    """The part of a signal at these frequencies, signed where it is complex."""
    spectrum = np.fft.fft(samples)
    frequency_hz = np.fft.fftfreq(len(samples), 1 / RATE_HZ)
    if not np.iscomplexobj(samples):
        frequency_hz = np.abs(frequency_hz)
    spectrum[(frequency_hz < low_hz) | (frequency_hz > high_hz)] = 0
    kept = np.fft.ifft(spectrum)
    return kept if np.iscomplexobj(samples) else kept.real


def speech_like(n: int, seed: int) -> np.ndarray:
    """Noise with the spectrum and the syllables of speech: falling by 9 dB an octave, four bursts a second, pauses."""
    rng = np.random.default_rng(seed)
    spectrum = np.fft.rfft(rng.standard_normal(n))
    frequency_hz = np.fft.rfftfreq(n, 1 / RATE_HZ)
    slow = np.fft.irfft(np.fft.rfft(rng.standard_normal(n)) * np.exp(-0.5 * (frequency_hz / 2.0) ** 2), n)
    spectrum *= np.minimum(1.0, (np.maximum(frequency_hz, 1.0) / 500.0) ** -1.5)
    message = banded(np.fft.irfft(spectrum, n) * np.maximum(slow / slow.std() + 0.5, 0.02), LOW_HZ, HIGH_HZ)
    return message / np.abs(message).max()


def noise(n: int, carrier_db_hz: float, seed: int) -> np.ndarray:
    """Complex noise under a carrier of amplitude 1 by that much in a hertz."""
    rng = np.random.default_rng(1_000 + seed)
    scale = np.sqrt(10 ** (-carrier_db_hz / 10) * RATE_HZ / 2)
    return scale * (rng.standard_normal(n) + 1j * rng.standard_normal(n))


def wander(n: int, bandwidth_hz: float, rms: float, seed: int) -> np.ndarray:
    rng = np.random.default_rng(2_000 + seed)
    spectrum = np.fft.rfft(rng.standard_normal(n))
    spectrum *= np.exp(-0.5 * (np.fft.rfftfreq(n, 1 / RATE_HZ) / bandwidth_hz) ** 2)
    slow = np.fft.irfft(spectrum, n)
    return rms * slow / slow.std()


def contests(make: MakeMessage, seconds: float, seed: int = 1) -> list[Contest]:
    """All of them, with messages of one kind."""
    n = round(seconds * RATE_HZ)
    t = np.arange(n) / RATE_HZ
    message, other = make(n, seed), make(n, 50 + seed)

    def full_carrier(depth: float, carrier_db_hz: float, k: int) -> np.ndarray:
        return 1 + depth * message + noise(n, carrier_db_hz, 100 * seed + k)

    def air(k: int) -> np.ndarray:
        return noise(n, 85.0, 100 * seed + k)

    def two_paths(delay_s: float, spread_hz: float, k: int) -> np.ndarray:
        return faded(1 + 0.8 * message.astype(complex), Fading(2, delay_s, spread_hz), RATE_HZ, 100 * seed + k)

    def pair(ratio: float, apart_hz: float) -> np.ndarray:
        second = np.exp(2j * np.pi * apart_hz * t + 1j)
        return (1 + 0.8 * message) * (1 + ratio * second)

    def sided(how: str, level: float) -> np.ndarray:
        if how == "H3E":
            side = analytic(message)
            carrier = np.abs(side).max() * 10 ** (-4.5 / 20) / (1 - 10 ** (-4.5 / 20))
            return 1 + side / carrier
        return 1 + level * vestigial_envelope(message, 1, RATE_HZ, Modulation(vestige_hz=VESTIGE_HZ))  # type: ignore[arg-type]

    rng = np.random.default_rng(3_000 + seed)
    impulses = np.zeros(n, complex)
    impulses[rng.integers(0, n, round(20 * seconds))] = 1.0
    impulses *= 2 * np.exp(2j * np.pi * rng.random(n))
    intruder = analytic(banded(other, 300.0, 2_400.0)) * np.exp(2j * np.pi * 700.0 * t)
    shaky = np.exp(0.6j * np.sin(2 * np.pi * 40 * t))
    first_half = t < seconds / 2
    drifting = np.exp(2j * np.pi * np.cumsum(wander(n, 8.0, 12.0, 12)) / RATE_HZ)
    am, sides = "A3E", "A3E sideband=better"
    return [
        Contest("deep, strong", am, full_carrier(0.85, 90.0, 2), message),
        Contest("light, strong", am, full_carrier(0.2, 90.0, 3), message),
        Contest("over-modulated to 200 %", am, full_carrier(2.0, 90.0, 4), message),
        Contest("weak, 60 dB-Hz", am, full_carrier(0.8, 60.0, 5), message),
        Contest("very weak, 50 dB-Hz", am, full_carrier(0.8, 50.0, 6), message),
        Contest("in the noise, 42 dB-Hz", am, full_carrier(0.8, 42.0, 6), message),
        Contest("two paths, 1 ms, 0.5 Hz", sides, two_paths(1e-3, 0.5, 7) + air(8), message, fades=True),
        Contest("two paths, 2 ms, 1 Hz", sides, two_paths(2e-3, 1.0, 9) + noise(n, 75.0, seed), message, fades=True),
        Contest("two carriers 10 kHz apart", am, pair(0.5, 5_000.0)[:n] + air(10), message),
        Contest("two carriers 12 Hz apart, −6 dB", am, pair(0.5, 12.0) + air(11), message),
        Contest("shaky: 0.6 rad at 40 Hz", am, full_carrier(0.8, 300.0, 0) * shaky + air(12), message),
        Contest("wandering: 12 Hz rms, 8 Hz fast", am, full_carrier(0.8, 300.0, 0) * drifting + noise(n, 75.0, 13), message),
        Contest("H3E, 4.5 dB", "H3E-USB", sided("H3E", 0.0) + air(14), message),
        Contest("C3E, strong carrier", "C3E-USB", sided("C3E", 0.15) + air(15), message),
        Contest("C3E, weak carrier", "C3E-USB", sided("C3E", 1.5) + air(16), message),
        Contest("a voice on one sideband", sides, full_carrier(0.8, 300.0, 0) + 0.1 * intruder + air(17), message),
        Contest("impulses", am, full_carrier(0.8, 300.0, 0) + impulses + air(18), message),
        Contest(
            "shaky, then over-modulated", am,
            (1 + np.where(first_half, 0.7, 1.6) * message) * np.where(first_half, shaky, 1.0) + air(19), message,
        ),
    ]  # fmt: skip


def hear(contest: Contest) -> Outcome:
    """The contest through each detector by hand and through the picker."""
    vestige = f" vestige={VESTIGE_HZ:g}Hz" if contest.channel.startswith("C3E") else ""
    channel = channel_from_text(f"1MHz {contest.channel} audio={LOW_HZ:g}-{HIGH_HZ:g}Hz agc=off squelch=off{vestige}")
    kind = kind_of(channel, PLAN)
    side = [channel.emission.side or 0]
    follower = make_follower(FollowerSettings(kind.follow, message_hz=kind.message_hz), 1, RATE_HZ, side)
    blocks = [contest.iq[None, k : k + BLOCK].astype(np.complex64) for k in range(0, len(contest.iq), BLOCK)]
    turned = [follower.process(block) for block in blocks] + [follower.flush()]
    score = sinad_of_moments_db if contest.fades else sinad_db

    def heard(candidates: tuple[str, ...]) -> tuple[float, DetectorSet, list[int]]:
        usable_hz = PLAN.usable_hz(kind.bins)
        detectors = DetectorSet(replace(kind, candidates=candidates), [channel], RATE_HZ, usable_hz)
        audio, choices = listened(detectors, turned)
        return score(audio, contest.message), detectors, choices

    by_hand_db = {name: heard((name,))[0] for name in kind.candidates}
    auto_db, detectors, choices = heard(kind.candidates)
    reason = detectors._reasons[0][choices[-1]]
    return Outcome(by_hand_db, auto_db, [kind.candidates[k] for k in choices], reason)


def listened(detectors: DetectorSet, turned: list[Turned]) -> tuple[np.ndarray, list[int]]:
    """The audio, and the choices made on the way."""
    choices: list[int] = []
    if detectors._picker is not None:
        decide = detectors._picker.process

        def noted(piece: Turned):
            made = decide(piece)
            choices.extend(made.candidate[0].tolist())
            return made

        detectors._picker.process = noted  # type: ignore[method-assign]
    audio = [detectors.process(piece, piece.iq) for piece in turned]
    return np.concatenate([*audio, detectors.flush()], axis=2)[0, 0].astype(float), choices


def sinad_db(audio: np.ndarray, message: np.ndarray, from_s: float = SETTLED_S, taps: int = 64) -> float:
    """Whatever of the audio no short filter makes of the message counts against it (normal equations of the fit)."""
    first, last = round(from_s * RATE_HZ), len(audio) - round(0.3 * RATE_HZ)
    heard, known = banded(audio, LOW_HZ, HIGH_HZ)[first:last], message[first:last]
    length = 1 << int(np.ceil(np.log2(2 * len(heard))))
    spectrum = np.fft.rfft(known, length)
    correlation = np.fft.irfft(np.abs(spectrum) ** 2, length)[:taps]
    product = np.roll(np.fft.irfft(np.fft.rfft(heard, length) * np.conj(spectrum), length), taps // 2)[:taps]
    correlation[0] *= 1 + 1e-7
    explained = float(solve_toeplitz(correlation, product) @ product) / len(heard)
    return float(10 * np.log10(explained / (np.mean(heard**2) - explained)))


def sinad_of_moments_db(audio: np.ndarray, message: np.ndarray, from_s: float = SETTLED_S, taps: int = 48) -> float:
    """Mean over quarter seconds of the figure with a filter each: slow fading is forgiven, distortion is not."""
    heard, moment = banded(audio, LOW_HZ, HIGH_HZ), round(RATE_HZ / 4)
    figures_db = []
    for start in range(round(from_s * RATE_HZ), len(heard) - 2 * moment, moment):
        known = message[start - taps // 2 : start + moment + taps - 1 - taps // 2]
        if np.mean(known**2) < 0.1 * np.mean(message**2):
            continue
        shifted = np.lib.stride_tricks.sliding_window_view(known, taps)
        product = shifted.T @ shifted
        product += 1e-6 * np.trace(product) / taps * np.eye(taps)
        piece = heard[start : start + moment]
        fitted = shifted @ np.linalg.solve(product, shifted.T @ piece)
        figures_db.append(10 * np.log10(np.sum(fitted**2) / np.sum((piece - fitted) ** 2)))
    return float(np.mean(figures_db))
