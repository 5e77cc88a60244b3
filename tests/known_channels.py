"""Groups of upright channels whose every figure is known: what the meters are judged by.

The follower is left out: each channel is turned by the truth, or by as much more as a test asks for, so that an error is
the meter's own.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from rxchain.carrier.hops import hop_samples
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.emissions import EMISSIONS
from rxchain.meters.figures import Figures
from rxchain.meters.group_meters import GroupMeters, MeteredChannel
from rxchain.synthesis.modulation import Modulation, modulate

RATE_HZ, WIDE_HZ = 12_000.0, 24_000.0
USABLE_SHARE = 0.43  # of the rate: where a channel of the bank is flat
CHUNK_HOPS = (
    48  # meters take in whole chunks; what is left of one at the end would be an error of the truth, not theirs
)
AMPLITUDE = 0.05  # of an unmodulated carrier, or of the peak envelope: meters must not depend on the level
DEPTH = 0.8
# 47 CFR 80.207(c)(2)-(3): reduced carrier 16 to 18 dB under peak envelope power, full carrier 3 to 6; pilots from memory.
CARRIER_DB = {"R3E": 18.0, "H3E": 4.5, "B8E": 20.0}
PILOT_DB = 20.0

MessageMaker = Callable[[int, float, tuple[float, float], np.random.Generator], np.ndarray]


def rate_of(name: str) -> float:
    """Quadrature stereo spreads beyond its message and has a channel twice as wide."""
    return WIDE_HZ if name == "AM-STEREO" else RATE_HZ


def noise(n: int, rate_hz: float, band_hz: tuple[float, float], rng: np.random.Generator) -> np.ndarray:
    """Gaussian noise that fills the band without pause, peak 1."""
    return _in_band(rng.standard_normal(n), rate_hz, band_hz)


def tone(n: int, rate_hz: float, band_hz: tuple[float, float], rng: np.random.Generator) -> np.ndarray:
    """One steady tone of amplitude 1, a whole number of cycles of it."""
    cycles = np.round(rng.uniform(max(300.0, band_hz[0]), min(2_500.0, band_hz[1])) * n / rate_hz)
    return np.cos(2 * np.pi * cycles * np.arange(n) / n + rng.uniform(0, 2 * np.pi))


def voices(folder: Path) -> MessageMaker:
    """Recorded people, cut at random places; the recordings are ``speech/*.wav`` of the folder."""
    import soundfile

    recordings = [soundfile.read(path, dtype="float64") for path in sorted((folder / "speech").glob("*.wav"))]

    def voice(n: int, rate_hz: float, band_hz: tuple[float, float], rng: np.random.Generator) -> np.ndarray:
        sound, file_rate_hz = recordings[rng.integers(len(recordings))]
        wanted = round(n * file_rate_hz / rate_hz)
        cut = np.resize(np.roll(sound, -int(rng.integers(len(sound)))), wanted)
        spectrum, kept = np.fft.rfft(cut), np.zeros(n // 2 + 1, complex)
        m = min(len(spectrum), len(kept)) - 1
        kept[:m] = spectrum[:m]
        return _in_band(np.fft.irfft(kept, n), rate_hz, band_hz)

    return voice


@dataclass(frozen=True, slots=True)
class Known:
    """A group of channels of one emission, and what its meters should read; arrays are ``(channels,)``."""

    channels: tuple[MeteredChannel, ...]
    rate_hz: float
    turned: Turned
    snr_db: np.ndarray
    offset_hz: np.ndarray
    carrier_to_noise_density_dbhz: np.ndarray
    rise_percent: np.ndarray
    fall_percent: np.ndarray
    efficiency_percent: np.ndarray
    level_dbfs: np.ndarray

    def meters(self) -> GroupMeters:
        """Fresh meters for the group."""
        return GroupMeters(self.channels, self.rate_hz, USABLE_SHARE * self.rate_hz)

    def figures(self) -> list[Figures]:
        """What the meters read over the whole time."""
        meters = self.meters()
        meters.process(self.turned)
        return meters.overall()


def known(
    name: str,
    make: MessageMaker,
    seconds: float,
    n_channels: int,
    seed: int,
    *,
    snr_db: float = 20.0,
    noise_density_db: float | None = None,
    how: Modulation | None = None,
    offset_hz: float = 0.0,
    turn_rad: Callable[[int, float, np.random.Generator], np.ndarray] | None = None,
    wander_rad2_per_s: float = 0.0,
) -> Known:
    """A group of one emission at the same SNR, or with the noise at so many dB under the carrier's power, per hertz.

    turn_rad : phase by which the follower is wrong, from (n, rate_hz, rng). wander_rad2_per_s : a random walk of the
    carrier's phase, which the follower follows.
    """
    emission, rate_hz = EMISSIONS[name], rate_of(name)
    hop = hop_samples(rate_hz)
    n = round(seconds * rate_hz / hop / CHUNK_HOPS) * CHUNK_HOPS * hop
    how = how or Modulation(
        DEPTH,
        CARRIER_DB.get(emission.family, np.inf),
        PILOT_DB if emission.family == "QAM" else np.inf,
        vestige_hz=emission.audio_hz[1] / 4,
        stereo_pilot=False,
    )
    rng = np.random.default_rng([seed, len(name), *name.encode()])
    iq = np.empty((n_channels, n), np.complex64)
    truth = []
    for row in range(n_channels):
        messages = np.stack([make(n, rate_hz, emission.audio_hz, rng) for _ in emission.messages])
        made = modulate(emission, messages, rate_hz, how)
        envelope, messages = AMPLITUDE * made.envelope, AMPLITUDE * made.messages
        carrier = float(np.mean(envelope).real)
        width_hz = noise_width_hz(name, how.vestige_hz)
        density = np.mean(messages**2) / width_hz / 10 ** (snr_db / 10)
        if noise_density_db is not None:
            density = AMPLITUDE**2 * 10 ** (noise_density_db / 10)
        heard = envelope + channel_noise(n, rate_hz, density, rng)
        if turn_rad is not None:
            heard = heard * np.exp(1j * turn_rad(n, rate_hz, rng))
        iq[row] = heard
        excursion = envelope.real / carrier - 1 if carrier > 0 and emission.is_double_sideband else np.zeros(1)
        if carrier > 0 and not emission.is_double_sideband:
            excursion = np.abs(envelope) / carrier - 1
        # Depth is told from the first chunk on that has another before it, and the last frame is still to come.
        fine = _finer(excursion)[8 * CHUNK_HOPS * hop : -16 * hop] if len(excursion) > 1 else excursion
        sidebands = float(np.mean(np.abs(envelope - carrier) ** 2))
        truth.append(
            (
                10 * np.log10(np.mean(messages**2) / (density * width_hz)),
                10 * np.log10(max(carrier**2, 1e-30) / density),
                100 * fine.max(),
                -100 * fine.min(),
                100 * sidebands / (sidebands + carrier**2),
                10 * np.log10(np.mean(np.abs(heard.astype(np.complex64)) ** 2)),
            )
        )
    hops = n // hop
    middle_s = (np.arange(hops) + 0.5) * hop / rate_hz
    middle_s -= middle_s.mean()
    walk = np.cumsum(rng.standard_normal((n_channels, hops)), axis=1) * np.sqrt(wander_rad2_per_s * hop / rate_hz)
    phase = offset_hz * middle_s + walk / (2 * np.pi)
    locked = np.full((n_channels, hops), Lock.LOCKED, np.int8)
    full = np.ones((n_channels, hops))
    # The received carrier's mean frequency over the time; a straight line's slope differs from it by little.
    mean_offset_hz = (phase[:, -1] - phase[:, 0]) / (middle_s[-1] - middle_s[0])
    track = Track(offset_hz * full, phase, AMPLITUDE * full, 1e-9 * full, locked)
    snr, *others = np.array(truth).T
    channel = MeteredChannel(emission, emission.audio_hz, how.vestige_hz if emission.is_vestigial else 0.0)
    return Known((channel,) * n_channels, rate_hz, Turned(iq, track, hop), snr, mean_offset_hz, *others)


def channel_noise(n: int, rate_hz: float, density: float, rng: np.random.Generator) -> np.ndarray:
    """Complex noise of a density as it comes through a channel: flat as far as the channel is, then falling to nothing."""
    spectrum = np.fft.fft(rng.standard_normal(n) + 1j * rng.standard_normal(n))
    beyond = np.abs(np.fft.fftfreq(n)) - USABLE_SHARE
    response = np.cos(np.pi / 2 * np.clip(beyond / (0.5 - USABLE_SHARE), 0.0, 1.0))
    return np.fft.ifft(spectrum * response) * np.sqrt(density * rate_hz / 2)


def noise_width_hz(name: str, vestige_hz: float) -> float:
    """Noise power in a message of a coherent detector, over the channel's noise density (Haykin, Communication Systems,
    ch. 2: both sidebands N0 B, one N0 B / 2; two copies of a vestige joined by their weights, the matched sum).
    """
    emission = EMISSIONS[name]
    low_hz, high_hz = emission.audio_hz
    width_hz = high_hz - low_hz
    if emission.is_double_sideband or emission.family == "QAM":
        return width_hz
    if not emission.is_vestigial:
        return width_hz / 2
    share = np.linspace(low_hz, high_hz, 20_001)
    whole = np.clip(0.5 + 0.5 * share / vestige_hz, 0.0, 1.0)
    return width_hz / 2 * float(np.mean(1.0 / (whole**2 + (1.0 - whole) ** 2)))


def steady_jitter(rms_rad: float, width_hz: float) -> Callable[[int, float, np.random.Generator], np.ndarray]:
    """A follower that shakes: Gaussian phase of that deviation, with nothing above that frequency."""

    def turn(n: int, rate_hz: float, rng: np.random.Generator) -> np.ndarray:
        phase = _in_band(rng.standard_normal(n), rate_hz, (0.0, width_hz))
        return phase * (rms_rad / np.std(phase))

    return turn


def values(figures: Sequence[Figures], name: str) -> tuple[np.ndarray, np.ndarray]:
    """A figure's values and deviations, (channels,) each, nan where there is none."""
    readings = [getattr(one, name) for one in figures]
    value = np.array([np.nan if one is None else one.value for one in readings])
    return value, np.array([np.nan if one is None else one.uncertainty for one in readings])


def _in_band(samples: np.ndarray, rate_hz: float, band_hz: tuple[float, float]) -> np.ndarray:
    spectrum = np.fft.rfft(samples)
    frequency_hz = np.fft.rfftfreq(len(samples), 1 / rate_hz)
    spectrum[(frequency_hz < band_hz[0]) | (frequency_hz > band_hz[1])] = 0
    kept = np.fft.irfft(spectrum, len(samples))
    return kept / np.abs(kept).max()


def _finer(samples: np.ndarray, times: int = 8) -> np.ndarray:
    """The same stretch at so many times the rate, so that no peak falls between samples."""
    n = len(samples)
    spectrum = np.fft.rfft(samples)
    return np.fft.irfft(np.pad(spectrum, (0, n * times // 2 + 1 - len(spectrum))), n * times) * times
