"""A scene as samples, with the truth about every emission in it.

Each emission is made at a low rate that holds it comfortably and brought to the capture's rate by an exact (periodic)
transform, then mixed with a phase kept in float64. Every random thing has a seed of its own, made from the scene's seed
and its owner's name, so that adding an emission changes nothing about the others.
"""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import ComplexBlock, Floats
from rxchain.synthesis.messages import make_message
from rxchain.synthesis.modulation import Modulated, modulate
from rxchain.synthesis.propagation import faded
from rxchain.synthesis.scene import Scene, Station

_EDGE_S = 0.005


@dataclass(frozen=True, slots=True)
class StationTruth:
    """What is true of one emission of a rendered scene.

    messages : float64, (messages, n), at ``message_rate_hz`` from the capture's first sample, in the units in which a
        linear receiver delivers them. snr_db : of each message for a coherent receiver that knows carrier and phase, in
        the message's band, while the emission is on; None without noise. Fading is not in either.
    carrier_offset_hz : at the middle of the emission's time. carrier_dbfs : minus infinity where none is sent.
    """

    station: Station
    messages: Floats
    message_rate_hz: float
    snr_db: tuple[float, ...] | None
    carrier_offset_hz: float
    carrier_dbfs: float
    start_sample: int
    stop_sample: int


@dataclass(frozen=True, slots=True)
class RenderedScene:
    """iq : complex64, (n,), full scale 1.0, before any quantisation."""

    iq: ComplexBlock
    truths: tuple[StationTruth, ...]


def render(scene: Scene) -> RenderedScene:
    """The whole capture; deterministic from the scene."""
    total = np.zeros(scene.n_samples, np.complex64)
    truths = tuple(_add_station(total, scene, station) for station in scene.stations)
    if scene.noise_dbfs_hz is not None:
        power = 10.0 ** (scene.noise_dbfs_hz / 10.0) * scene.rate_hz
        _add_noise(total, power, child_seed(scene.seed, "noise"))
    for number, impulses in enumerate(scene.impulses):
        rng = np.random.default_rng(child_seed(scene.seed, f"impulses {number}"))
        n = rng.poisson(impulses.per_second * scene.seconds)
        length = max(1, round(impulses.length_s * scene.rate_hz))
        starts = rng.integers(0, max(1, len(total) - length), n)
        kicks = 10.0 ** (impulses.level_dbfs / 20.0) * np.exp(2j * np.pi * rng.random(n))
        for start, kick in zip(starts, kicks, strict=True):
            total[start : start + length] += np.complex64(kick)
    return RenderedScene(total, truths)


def child_seed(seed: int, name: str) -> int:
    """A seed for one thing in a scene."""
    return int(np.random.SeedSequence([seed, zlib.crc32(name.encode())]).generate_state(1)[0])


def low_rate_hz(station: Station, rate_hz: float) -> float:
    """The rate at which an emission is made: a fraction of the capture's, several times its bandwidth."""
    wide = 12.0 if station.emission.family == "AM-STEREO" else 4.0
    wanted_hz = max(24_000.0, wide * station.audio_hz[1])
    return rate_hz / max(1, int(rate_hz // wanted_hz))


def modulated_station(station: Station, n: int, rate_hz: float, seed: int) -> Modulated:
    """An emission's envelope and messages at a low rate, full scale 1.0, before propagation."""
    messages = np.stack(
        [
            make_message(message, n, rate_hz, station.audio_hz, child_seed(seed, f"{station.name} message {k}"))
            for k, message in enumerate(station.messages)
        ]
    )
    made = modulate(station.emission, messages, rate_hz, station.how)
    amplitude = 10.0 ** (station.level_dbfs / 20.0)
    return Modulated(amplitude * made.envelope, amplitude * made.messages)


def _add_station(total: ComplexBlock, scene: Scene, station: Station) -> StationTruth:
    n = len(total)
    rate_hz = low_rate_hz(station, scene.rate_hz)
    # The exact transform takes the stretch as periodic; both lengths must span the same time.
    times = round(scene.rate_hz / rate_hz)
    n_low = next_smooth(-(-n // times))
    made = modulated_station(station, n_low, rate_hz, scene.seed)
    on = _gate(station, n_low, rate_hz, scene.seconds)
    envelope = made.envelope * on
    if station.fading is not None:
        envelope = faded(envelope, station.fading, rate_hz, child_seed(scene.seed, f"{station.name} fading"))
    wide = _interpolated(envelope, times)[:n]
    t = np.arange(n) / scene.rate_hz
    cycles = (station.frequency_hz + station.offset_hz - scene.centre_hz) * t + 0.5 * station.drift_hz_s * t * t
    cycles += station.phase_degrees / 360.0
    total += (wide * np.exp(2j * np.pi * (cycles - np.floor(cycles)))).astype(np.complex64)
    stop_s = min(scene.seconds, station.stop_s if station.stop_s is not None else scene.seconds)
    start, stop = round(station.start_s * scene.rate_hz), round(stop_s * scene.rate_hz)
    kept = round(scene.seconds * rate_hz)
    active = slice(round(station.start_s * rate_hz), round(stop_s * rate_hz))
    return StationTruth(
        station=station,
        messages=(made.messages * on)[:, :kept],
        message_rate_hz=rate_hz,
        snr_db=_snr_db(scene, station, made.messages[:, active]),
        carrier_offset_hz=station.offset_hz + station.drift_hz_s * (station.start_s + stop_s) / 2.0,
        carrier_dbfs=_carrier_dbfs(station, made),
        start_sample=start,
        stop_sample=stop,
    )


def noise_bandwidth_hz(station: Station) -> float:
    """Bandwidth whose noise power a coherent detector's message carries, in the units of :class:`StationTruth`.

    Both sidebands' noise falls on the real part of a double sideband: N0 B. Of a single sideband half as much: N0 B / 2.
    A vestigial emission lies between them, by the best weighting of its two copies; stereo's left and right take half
    each of sum and difference.
    """
    low_hz, high_hz = station.audio_hz
    width_hz = high_hz - low_hz
    family = station.emission.family
    if family in ("A3E", "DSB-SC", "QAM"):
        return width_hz
    if not station.emission.is_vestigial:
        return width_hz / 2.0
    frequency_hz = np.linspace(low_hz, high_hz, 4001)
    edge_hz = station.how.vestige_hz
    if station.how.vestige_is_flat:
        gain, mirrored = np.ones(len(frequency_hz)), np.where(frequency_hz <= edge_hz, 1.0, 0.0)
    else:
        gain = np.clip(0.5 + 0.5 * frequency_hz / edge_hz, 0.0, 1.0)
        mirrored = 1.0 - gain
    return float(np.mean(1.0 / (gain**2 + mirrored**2)) * width_hz / 2.0)


def quantisation_density(scene: Scene) -> float:
    """Noise per hertz that rounding to the capture's format adds: a twelfth of a step squared in each component."""
    step = {"cf32_le": 0.0, "ci16_le": 1.0 / 32768.0, "ci8": 1.0 / 128.0, "cu8": 1.0 / 127.5}[scene.format]
    return 2.0 * step**2 / 12.0 / scene.rate_hz


def _snr_db(scene: Scene, station: Station, messages: Floats) -> tuple[float, ...] | None:
    if scene.noise_dbfs_hz is None or messages.shape[1] == 0:
        return None
    density = 10.0 ** (scene.noise_dbfs_hz / 10.0) + quantisation_density(scene)
    noise = density * noise_bandwidth_hz(station)
    power = np.mean(messages**2, axis=1)
    if station.emission.family == "A1A":
        power = power / 2.0  # what is heard is a note of the keying's amplitude
    return tuple(float(10.0 * np.log10(max(one, 1e-30) / noise)) for one in power)


def _carrier_dbfs(station: Station, made: Modulated) -> float:
    level_dbfs = station.level_dbfs
    match station.emission.family:
        case "A3E" | "C3E" | "AM-STEREO" | "A1A":
            return level_dbfs
        case "J3E" | "R3E" | "H3E" | "B8E":
            return level_dbfs - station.how.carrier_db
        case "QAM":
            power = float(np.mean(np.sum(made.messages**2, axis=0)))
            return float(10.0 * np.log10(max(power, 1e-30))) - station.how.pilot_db
    return -float("inf")


def _gate(station: Station, n: int, rate_hz: float, seconds: float) -> Floats:
    """1 while the emission is on, with 5 ms raised-cosine edges where it does not fill the capture."""
    gate = np.ones(n)
    t = np.arange(n) / rate_hz
    if station.start_s > 0:
        gate *= 0.5 - 0.5 * np.cos(np.pi * np.clip((t - station.start_s) / _EDGE_S, 0.0, 1.0))
    if station.stop_s is not None and station.stop_s < seconds:
        gate *= 0.5 - 0.5 * np.cos(np.pi * np.clip((station.stop_s - t) / _EDGE_S, 0.0, 1.0))
    return gate


def _interpolated(envelope: NDArray[np.complex128], times: int) -> NDArray[np.complex128]:
    if times == 1:
        return envelope
    n = len(envelope)
    spectrum = scipy.fft.fft(envelope)
    wide = np.zeros(n * times, complex)
    half = n // 2
    wide[:half], wide[-(n - half) :] = spectrum[:half], spectrum[half:]
    series: NDArray[np.complex128] = scipy.fft.ifft(wide, overwrite_x=True)
    return series * times


def _add_noise(total: ComplexBlock, power: float, seed: int) -> None:
    rng = np.random.default_rng(seed)
    scale = np.float32(np.sqrt(power / 2.0))
    piece = 1 << 20
    for start in range(0, len(total), piece):
        part = total[start : start + piece]
        part += (rng.standard_normal((len(part), 2), np.float32) * scale).view(np.complex64)[:, 0]
