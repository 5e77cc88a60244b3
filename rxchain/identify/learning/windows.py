"""Labelled windows: an emission of known template, off-tune, faded or not, in noise, as the bank would deliver it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from rxchain.emissions import EMISSIONS
from rxchain.identify.evidence import SIDED
from rxchain.identify.learning import foreign
from rxchain.identify.learning.material import RATE_HZ
from rxchain.identify.short_time import RATE_HZ as CHANNEL_HZ
from rxchain.streams import ComplexBlock, Floats
from rxchain.synthesis.messages import Message, make_message
from rxchain.synthesis.modulation import Envelope, Modulation, modulate
from rxchain.synthesis.propagation import Fading, faded

_OFFSET_HZ, _FAR_HZ, _FAR_SHARE = 100.0, 450.0, 0.1
_UNPLACED = ("J3E", "B8E/no pilot", "QAM/no pilot")  # nothing shows how far off they are
_BANDS_HZ = ((300.0, 3_000.0), (300.0, 2_700.0), (100.0, 4_500.0), (200.0, 3_400.0), (50.0, 5_000.0))
_SPEECH_BANDS_HZ = ((300.0, 2_700.0), (300.0, 3_000.0), (200.0, 3_400.0), (100.0, 2_900.0))
_BEAT_WIDTH_HZ = 500.0
_DRIFT_HZ_S = 1.0
_CALLS = "CQ CQ DE HARBOUR TOWER K ", "TEST TEST 5NN 5NN ", "VVV VVV DE BUOY SEVEN ", "QRV AR THE QUICK BROWN FOX "


Draw: TypeAlias = Callable[[int, tuple[float, float], np.random.Generator], Floats]


@dataclass(frozen=True, slots=True)
class Conditions:
    """What a window goes through: SNR of its whole power over the noise in its own bandwidth, and the path."""

    snr_db: float
    fading: Fading | None = None
    offset_hz: float = 0.0
    drift_hz_s: float = 0.0


def draw_conditions(template: str, rng: np.random.Generator) -> Conditions:
    """Half of the windows fade; SNR evenly from -1 to 36 dB; a tenth of those that show where they are lie far off."""
    fading = None
    if rng.random() < 0.5:
        paths = 2 if rng.random() < 0.8 else 1
        fading = Fading(paths, rng.uniform(0.3e-3, 2.5e-3), float(np.exp(rng.uniform(np.log(0.1), np.log(2.0)))))
    drift_hz_s = rng.uniform(-_DRIFT_HZ_S, _DRIFT_HZ_S) if rng.random() < 0.2 else 0.0
    furthest_hz = _FAR_HZ if rng.random() < _FAR_SHARE and template not in _UNPLACED else _OFFSET_HZ
    return Conditions(rng.uniform(-1.0, 36.0), fading, rng.uniform(-furthest_hz, furthest_hz), drift_hz_s)


def draw_window(
    template: str, seconds: float, conditions: Conditions, draw: Draw, rng: np.random.Generator
) -> tuple[ComplexBlock, int]:
    """A window, complex64, (samples,) at 12 kHz, and the side of its emission: +1 upper, -1 lower, 0 none."""
    n = round(seconds * RATE_HZ) // 4 * 4
    family = template.split("/")[0]
    if family == "NOISE":
        return _noise(n // 2, 1.0, rng), 0
    side = 0
    if family == "OTHER":
        envelope, half_hz = _foreign(template, n, draw, rng)
    else:
        side = int(rng.choice([-1, 1])) if family in SIDED else 0
        name = family + {1: "-USB", -1: "-LSB", 0: ""}[side]
        envelope, half_hz = _of_the_family(name, "no pilot" in template, n, draw, rng)
    if conditions.fading is not None:
        envelope = faded(envelope, conditions.fading, RATE_HZ, int(rng.integers(2**31)))
    t = np.arange(n) / RATE_HZ
    cycles = conditions.offset_hz * t + 0.5 * conditions.drift_hz_s * t * t + rng.uniform()
    envelope = envelope * np.exp(2j * np.pi * cycles)
    iq = _decimated(envelope / np.sqrt(np.mean(np.abs(envelope) ** 2)))
    density = 10.0 ** (-conditions.snr_db / 10.0) / (2.0 * half_hz)
    return (iq + _noise(n // 2, density * CHANNEL_HZ, rng)).astype(np.complex64), side


def _of_the_family(
    name: str, without_pilot: bool, n: int, draw: Draw, rng: np.random.Generator
) -> tuple[Envelope, float]:
    emission = EMISSIONS[name]
    speech = emission.is_single_sideband or emission.family == "B8E"
    bands = _SPEECH_BANDS_HZ if speech else _BANDS_HZ
    band_hz = bands[rng.integers(len(bands))]
    if emission.family == "AM-STEREO":
        band_hz = (band_hz[0], min(band_hz[1], 3_000.0))
    how = Modulation(
        depth=rng.uniform(0.3, 1.0),
        carrier_db=_carrier_db(emission.family, without_pilot, rng),
        pilot_db=float("inf") if without_pilot or emission.family != "QAM" else rng.uniform(18.0, 30.0),
        vestige_hz=rng.uniform(0.17, 0.33) * band_hz[1],
        vestige_is_flat=bool(rng.random() < 0.3),
    )
    if emission.family == "A1A":
        text, speed = _CALLS[rng.integers(len(_CALLS))], rng.uniform(10.0, 32.0)
        skipped = int(rng.uniform(0.0, 6.0) * RATE_HZ)
        keyed = Message("morse", text=text, words_per_minute=speed)
        messages = make_message(keyed, n + skipped, RATE_HZ, band_hz, 0)[None, skipped:]
        return modulate(emission, messages, RATE_HZ, how).envelope, _BEAT_WIDTH_HZ / 2.0
    messages = np.stack([draw(n, band_hz, rng) for _ in emission.messages])
    half_hz = {True: 0.5, False: 1.0}[emission.is_single_sideband] * band_hz[1]
    if emission.is_vestigial:
        half_hz = 0.625 * band_hz[1]
    return modulate(emission, messages, RATE_HZ, how).envelope, half_hz


def _carrier_db(family: str, without_pilot: bool, rng: np.random.Generator) -> float:
    """Below peak envelope power: 47 CFR 80.207(c) and, for aircraft, as low as 26 dB."""
    match family:
        case "R3E":
            return float(rng.uniform(16.0, 26.0))
        case "H3E":
            return float(rng.uniform(3.0, 6.0))
        case "B8E" if not without_pilot:
            return float(rng.uniform(16.0, 26.0))
        case "J3E" if rng.random() < 0.3:
            return float(rng.uniform(42.0, 60.0))
    return float("inf")


def _foreign(template: str, n: int, draw: Draw, rng: np.random.Generator) -> tuple[Envelope, float]:
    match template.split("/")[1]:
        case "angle modulation":
            return foreign.frequency_modulated(draw(n, (300.0, 3_000.0), rng), rng), 5_000.0
        case "frequency-shift keying":
            return foreign.shift_keyed(n, rng)
        case "phase-shift keying":
            return foreign.phase_keyed(n, rng)
        case "many tones":
            return foreign.many_tones(n, rng)
    return foreign.bare_carrier(n, rng), _BEAT_WIDTH_HZ / 2.0


def _noise(n: int, power: float, rng: np.random.Generator) -> ComplexBlock:
    draws = rng.standard_normal((n, 2), np.float32) * np.float32(np.sqrt(power / 2.0))
    return draws.view(np.complex64)[:, 0]


def _decimated(envelope: Envelope) -> Envelope:
    """At 12 kHz, half the learning rate, cut at the channel's edges."""
    spectrum = np.fft.fft(envelope)
    m = len(spectrum) // 2
    kept = np.concatenate([spectrum[: m // 2], spectrum[-(m - m // 2) :]])
    return np.fft.ifft(kept) / 2.0
