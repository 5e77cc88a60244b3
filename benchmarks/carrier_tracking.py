"""Measure the carrier followers: locking, phase, drift, pilots beside speech, suppressed carriers, fading, speed.

Prints markdown tables. Speech comes from ``../shared/recordings`` beside the repository; tables that need it are left
out where it is absent. Usage::

    python benchmarks/carrier_tracking.py [table ...]
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.signal import butter, hilbert, oaconvolve, resample_poly, sosfiltfilt

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from rxchain.carrier.follower import CarrierFollower, FollowerSettings
from rxchain.carrier.track import Follow, Lock, Track

RATE_HZ = 12_000.0
SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
AMPLITUDE = 0.1
CHANNELS = 12

Floats = NDArray[np.float64]


@dataclass
class Run:
    """What a follower made of a group of channels."""

    iq: NDArray[np.complex64]
    track: Track
    hop: int
    bandwidth_hz: Floats

    def hop_time_s(self) -> Floats:
        """Middles of the hops."""
        return ((np.arange(self.track.lock.shape[1]) + 0.5) * self.hop - 0.5) / RATE_HZ

    def first_lock_s(self) -> Floats:
        """Start of each channel's first locked hop; infinity where there is none."""
        locked = self.track.lock == Lock.LOCKED
        first = locked.argmax(axis=1) * self.hop / RATE_HZ
        return np.where(locked.any(axis=1), first, np.inf)

    def phase_error_deg(self, phase: Callable[[Floats], Floats], fold: int = 1) -> Floats:
        """Error per hop; ``phase`` gives the true phase, (channels, hops), in cycles; folded into a part of a turn."""
        error = (self.track.phase_cycles - phase(self.hop_time_s())) * fold
        return 360.0 * (error - np.rint(error)) / fold


def follow(
    iq: NDArray[np.complexfloating], settings: FollowerSettings, sides: list[int] | None = None, block: int = 4096
) -> Run:
    follower = CarrierFollower(settings, iq.shape[0], RATE_HZ, sides)
    iq = iq.astype(np.complex64)
    pieces, bandwidths_hz = [], []
    for k in range(0, iq.shape[1], block):
        pieces.append(follower.process(iq[:, k : k + block]))
        bandwidths_hz.append(follower.bandwidth_hz)
    bandwidth_hz = np.mean(bandwidths_hz[len(bandwidths_hz) // 4 :], axis=0)
    pieces.append(follower.flush())
    track = Track(
        *(
            np.concatenate([getattr(piece.track, name) for piece in pieces], axis=1)
            for name in ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")
        )
    )
    return Run(np.concatenate([piece.iq for piece in pieces], axis=1), track, follower.hop_samples, bandwidth_hz)


def noise(rng: np.random.Generator, shape: tuple[int, int], density: float) -> NDArray[np.complex128]:
    return np.sqrt(density * RATE_HZ / 2) * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def voice(name: str, seconds: float, low_hz: float, high_hz: float, start_s: float = 0.0) -> Floats:
    import soundfile

    audio, rate = soundfile.read(SPEECH / name)
    audio = resample_poly(audio, int(RATE_HZ), int(rate))
    audio = sosfiltfilt(butter(4, (low_hz, high_hz), "bandpass", fs=RATE_HZ, output="sos"), audio)
    start, n = int(start_s * RATE_HZ), int(seconds * RATE_HZ)
    audio = np.resize(np.roll(audio, -start), n)
    return audio / np.abs(audio).max()


def voices(seconds: float, low_hz: float, high_hz: float) -> Floats:
    """One voice a channel, alternately of the woman and of the men, each from another place."""
    names = ("woman-30s-8k.wav", "man-7s-16k.wav", "woman-30s-8k.wav", "man-5s-16k.wav", "woman-30s-8k.wav")
    return np.array([voice(names[c % 5], seconds, low_hz, high_hz, 2.1 * c) for c in range(CHANNELS)])


def carriers(
    rng: np.random.Generator, seconds: float, drift_hz_s: float = 0.0, reach_hz: float = 200.0
) -> tuple[NDArray[np.complex128], Callable[[Floats], Floats], Floats]:
    f0 = rng.uniform(-reach_hz, reach_hz, (CHANNELS, 1))
    p0 = rng.uniform(0.0, 1.0, (CHANNELS, 1))

    def phase(t: Floats) -> Floats:
        return p0 + f0 * t + 0.5 * drift_hz_s * t**2

    t = np.arange(int(seconds * RATE_HZ)) / RATE_HZ
    return np.exp(2j * np.pi * phase(t)), phase, f0


def rms(values: Floats, axis: int = 1) -> Floats:
    return np.sqrt(np.mean(values**2, axis=axis))


def hop_power(message: Floats, run: Run) -> Floats:
    padded = np.pad(message**2, ((0, 0), (0, run.track.lock.shape[1] * run.hop - message.shape[1])))
    return padded.reshape(CHANNELS, -1, run.hop).mean(axis=2)


def row(*cells: object) -> None:
    print("| " + " | ".join(f"{cell:.3g}" if isinstance(cell, float) else str(cell) for cell in cells) + " |")


def head(title: str, *columns: str) -> None:
    print(f"\n### {title}\n")
    row(*columns)
    row(*("---" for _ in columns))


def lock_times() -> None:
    head("Time to the first locked hop, s (median / worst of channels)", "follow", "C/N0 dB-Hz", "median", "worst")
    for follow_kind, levels in ((Follow.CARRIER, (60, 40, 30, 25, 22)), (Follow.PILOT, (60, 40, 30, 25, 22, 20))):
        for cn0 in levels:
            firsts = []
            for seed in range(4):
                rng = np.random.default_rng(100 * cn0 + seed)
                tone, _, _ = carriers(rng, 4.0)
                iq = AMPLITUDE * tone + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
                firsts.append(follow(iq, FollowerSettings(follow_kind)).first_lock_s())
            row(follow_kind.value, cn0, float(np.median(firsts)), float(np.max(firsts)))


def jitter() -> None:
    head(
        "Phase of an unmodulated line, from 3 s",
        "follow",
        "delay",
        "C/N0 dB-Hz",
        "drift Hz/s",
        "phase rms deg",
        "over Bn/(C/N0), dB",
        "Bn Hz",
        "frequency rms Hz",
        "C/N0 read less true, dB",
        "locked",
    )
    for kind, live in ((Follow.CARRIER, False), (Follow.CARRIER, True), (Follow.PILOT, False)):
        for cn0 in (70, 50, 40, 30, 20):
            for drift in (0.0, 20.0):
                rng = np.random.default_rng(cn0)
                tone, phase, f0 = carriers(rng, 12.0, drift)
                iq = AMPLITUDE * tone + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
                run = follow(iq, FollowerSettings(kind, live=live))
                t = run.hop_time_s()
                late = (t > 3.0) & (t < 11.5)
                error = rms(run.phase_error_deg(phase)[:, late])
                bound = np.degrees(np.sqrt(run.bandwidth_hz / 10 ** (cn0 / 10)))
                offset = rms((run.track.offset_hz - f0 - drift * t)[:, late])
                reading = 10 * np.log10((run.track.amplitude**2 / run.track.noise_density)[:, late].mean(axis=1)) - cn0
                row(
                    kind.value,
                    "live" if live else "full",
                    cn0,
                    drift,
                    float(np.median(error)),
                    float(20 * np.log10(rms(error, 0) / rms(bound, 0))),
                    float(np.median(run.bandwidth_hz)),
                    float(np.median(offset)),
                    float(np.median(reading)),
                    float(np.mean(run.track.lock[:, late] == Lock.LOCKED)),
                )


def amplitude_modulated() -> None:
    head(
        "A3E, depth 0.8, speech 100-4500 Hz",
        "C/N0 dB-Hz",
        "drift Hz/s",
        "phase rms deg, median / worst",
        "frequency rms Hz",
        "locked from 1 s",
    )
    message = voices(12.0, 100.0, 4500.0)
    for cn0 in (75, 60, 40, 30):
        for drift in (0.0, 20.0):
            rng = np.random.default_rng(cn0)
            tone, phase, f0 = carriers(rng, 12.0, drift)
            iq = AMPLITUDE * tone * (1 + 0.8 * message) + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
            run = follow(iq, FollowerSettings(Follow.CARRIER))
            t = run.hop_time_s()
            late = (t > 3.0) & (t < 11.5)
            error = rms(run.phase_error_deg(phase)[:, late])
            offset = rms((run.track.offset_hz - f0 - drift * t)[:, late])
            locked = np.mean(run.track.lock[:, t > 1.0] == Lock.LOCKED)
            row(cn0, drift, f"{np.median(error):.3f} / {error.max():.3f}", float(np.median(offset)), float(locked))


def pilots() -> None:
    head(
        "Pilot beside speech, upper sideband; level under peak envelope power",
        "pilot dB",
        "audio SNR dB",
        "low edge Hz",
        "drift Hz/s",
        "pilot C/N0",
        "first lock s, median / worst",
        "phase rms deg, median / worst",
        "frequency rms Hz",
        "locked",
    )
    for low_hz in (300.0, 100.0):
        sideband = hilbert(voices(14.0, low_hz, 2700.0))
        sideband /= np.abs(sideband).max(axis=1, keepdims=True)
        for level_db in (-16, -18, -20, -26):
            for snr_db in (20, 6):
                for drift in (0.0, 20.0):
                    if drift and low_hz == 100.0:
                        continue
                    rng = np.random.default_rng(-level_db + snr_db)
                    tone, phase, f0 = carriers(rng, 14.0, drift)
                    pilot = 10 ** (level_db / 20)
                    message = (1 - pilot) * sideband
                    density = np.mean(np.abs(message) ** 2) / 10 ** (snr_db / 10) / 2400.0
                    iq = AMPLITUDE * (tone * (pilot + message) + noise(rng, tone.shape, density))
                    settings = FollowerSettings(Follow.PILOT, message_hz=(low_hz, 2700.0))
                    run = follow(iq, settings, [1] * CHANNELS)
                    t = run.hop_time_s()
                    late = (t > 3.0) & (t < 13.5)
                    error = rms(run.phase_error_deg(phase)[:, late])
                    offset = rms((run.track.offset_hz - f0 - drift * t)[:, late])
                    first = run.first_lock_s()
                    row(
                        level_db,
                        snr_db,
                        int(low_hz),
                        drift,
                        float(10 * np.log10(pilot**2 / density)),
                        f"{np.median(first):.2f} / {first.max():.2f}",
                        f"{np.median(error):.2f} / {error.max():.2f}",
                        float(np.median(offset)),
                        float(np.mean(run.track.lock[:, late] == Lock.LOCKED)),
                    )


def suppressed() -> None:
    head(
        "Suppressed carrier, speech; phase folded to half a turn and weighted by the message's power",
        "band Hz",
        "SNR dB",
        "drift Hz/s",
        "first lock s, median / worst",
        "phase rms deg, median / worst",
        "channels with half-turn flips",
        "frequency rms Hz",
        "locked or held",
    )
    for low_hz, high_hz in ((100.0, 4500.0), (300.0, 2700.0)):
        message = voices(16.0, low_hz, high_hz)
        for snr_db in (30, 20, 10, 6):
            for drift in (0.0, 20.0):
                rng = np.random.default_rng(snr_db)
                tone, phase, f0 = carriers(rng, 16.0, drift)
                density = np.mean(message**2) / 10 ** (snr_db / 10) / (2 * high_hz)
                iq = AMPLITUDE * (tone * message + noise(rng, tone.shape, density))
                run = follow(iq, FollowerSettings(Follow.SQUARE, message_hz=(low_hz, high_hz)))
                t = run.hop_time_s()
                late = (t > 3.5) & (t < 15.5)
                power = hop_power(message, run)[:, late]
                folded = run.phase_error_deg(phase, 2)[:, late]
                error = np.sqrt(np.sum(power * folded**2, axis=1) / power.sum(axis=1))
                whole = run.phase_error_deg(phase)[:, late]
                side = np.abs(whole) > 90.0
                loud = power > 0.1 * power.mean(axis=1, keepdims=True)
                flips = [bool(np.any(np.diff(s[use].astype(int)))) for s, use in zip(side, loud, strict=True)]
                offset = rms((run.track.offset_hz - f0 - drift * t)[:, late])
                first = run.first_lock_s()
                row(
                    f"{low_hz:.0f}-{high_hz:.0f}",
                    snr_db,
                    drift,
                    f"{np.median(first):.2f} / {first.max():.2f}",
                    f"{np.median(error):.2f} / {error.max():.2f}",
                    f"{sum(flips)}/{CHANNELS}",
                    float(np.median(offset)),
                    float(np.mean(run.track.lock[:, late] > Lock.NONE)),
                )


def fades() -> None:
    head("Suppressed carrier, 2 s fade of 40 dB in speech", "SNR dB", "drift Hz/s", "channels turned by half after it")
    message = voices(14.0, 100.0, 4500.0)
    t = np.arange(message.shape[1]) / RATE_HZ
    fade = np.where((t > 7.0) & (t < 9.0), 0.01, 1.0)
    for snr_db in (30, 20, 10):
        for drift in (0.0, 2.0):
            rng = np.random.default_rng(snr_db)
            tone, phase, _ = carriers(rng, 14.0, drift)
            density = np.mean(message**2) / 10 ** (snr_db / 10) / 9000.0
            iq = AMPLITUDE * (tone * message * fade + noise(rng, tone.shape, density))
            run = follow(iq, FollowerSettings(Follow.SQUARE, message_hz=(100.0, 4500.0)))
            hop_t = run.hop_time_s()
            error = run.phase_error_deg(phase)
            loud = hop_power(message, run)
            turned = 0
            for c in range(CHANNELS):
                before = np.angle(np.sum((loud[c] * np.exp(1j * np.radians(error[c])))[(hop_t > 5.5) & (hop_t < 6.9)]))
                after = np.angle(np.sum((loud[c] * np.exp(1j * np.radians(error[c])))[(hop_t > 9.2) & (hop_t < 11.0)]))
                turned += bool(np.cos(after - before) < 0.0)
            row(snr_db, drift, f"{turned}/{CHANNELS}")


def false_claims() -> None:
    head("Noise alone: hops claimed", "follow", "channel-seconds", "claims")
    for kind, seconds in (
        (Follow.CARRIER, 40.0),
        (Follow.PILOT, 40.0),
        (Follow.SQUARE, 40.0),
        (Follow.FOURTH_POWER, 20.0),
    ):
        claims, total = 0, 0.0
        for seed in range(2):
            rng = np.random.default_rng(seed)
            iq = noise(rng, (50, int(seconds * RATE_HZ)), 1e-6)
            lock = follow(iq, FollowerSettings(kind)).track.lock
            claims += int(np.sum(np.diff((lock > 0).astype(int), axis=1) > 0))
            total += 50 * seconds
        row(kind.value, int(total), claims)


def losses() -> None:
    head(
        "The carrier stops: lock given up after, s",
        "follow",
        "C/N0 dB-Hz",
        "median",
        "worst",
        "after a 0.5 s gap: locked again",
    )
    for kind in (Follow.CARRIER, Follow.PILOT):
        for cn0 in (70, 60, 50, 40, 30):
            rng = np.random.default_rng(cn0)
            tone, _, _ = carriers(rng, 9.0)
            t = np.arange(tone.shape[1]) / RATE_HZ
            gate = np.where((t > 3.0) & (t < 3.5), 0.0, 1.0) * (t < 6.0)
            iq = AMPLITUDE * tone * gate + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
            iq[:, (t > 3.0) & (t < 3.5)] = 0.0
            run = follow(iq, FollowerSettings(kind))
            hop_t = run.hop_time_s()
            after = run.track.lock[:, hop_t > 6.0]
            late = (after == Lock.LOCKED).sum(axis=1) * run.hop / RATE_HZ
            again = np.mean(run.track.lock[:, (hop_t > 4.2) & (hop_t < 5.9)] == Lock.LOCKED)
            row(kind.value, cn0, float(np.median(late)), float(late.max()), float(again))


def keyed() -> None:
    head(
        "Full carrier keyed once a second, C/N0 of the full carrier",
        "drops to",
        "for s",
        "C/N0",
        "locked while full",
        "held or locked",
        "phase rms deg while full",
    )
    for floor, length_s in ((0.15, 0.1), (0.15, 0.2), (0.0, 0.2), (0.0, 0.5), (0.0, 0.8)):
        for cn0 in (60, 40, 30):
            rng = np.random.default_rng(cn0)
            tone, phase, _ = carriers(rng, 14.0)
            t = np.arange(tone.shape[1]) / RATE_HZ
            key = np.where((t + 0.3) % 1.0 < length_s, floor, 1.0)
            iq = AMPLITUDE * tone * key + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
            run = follow(iq, FollowerSettings(Follow.CARRIER))
            hop_t = run.hop_time_s()
            late = (hop_t > 3.0) & (hop_t < 13.5)
            full = late & ((hop_t + 0.3) % 1.0 > length_s + 0.01) & ((hop_t + 0.3) % 1.0 < 0.99)
            row(
                floor,
                length_s,
                cn0,
                float(np.mean(run.track.lock[:, full] == Lock.LOCKED)),
                float(np.mean(run.track.lock[:, late] > Lock.NONE)),
                float(np.median(rms(run.phase_error_deg(phase)[:, full]))),
            )


def tones_beside_pilots() -> None:
    head("A steady tone 20 dB over the pilot", "side", "tone from the pilot, Hz", "pilot taken", "worst first lock s")
    for side, tone_hz in ((1, 1000.0), (1, 400.0), (-1, -400.0), (0, 700.0)):
        rng = np.random.default_rng(7)
        tone, _, f0 = carriers(rng, 4.0, reach_hz=150.0)
        t = np.arange(tone.shape[1]) / RATE_HZ
        iq = AMPLITUDE * tone * (0.1 + np.exp(2j * np.pi * tone_hz * t)) + noise(rng, tone.shape, 1e-8)
        run = follow(iq, FollowerSettings(Follow.PILOT), [side] * CHANNELS)
        right = np.abs(run.track.offset_hz[:, -60:] - f0).max(axis=1) < 1.0
        row(side, int(tone_hz), f"{right.sum()}/{CHANNELS}", float(run.first_lock_s().max()))


def watterson(
    rng: np.random.Generator, iq: NDArray[np.complex128], delay_s: float, spread_hz: float
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """Two paths of equal power with Gaussian Doppler spectra of the given spread, two standard deviations wide."""
    n = iq.shape[1]
    rate = 200.0
    m = int(n / RATE_HZ * rate) + 200
    sigma = spread_hz / 2
    length = int(4 * rate / max(sigma, 0.05)) | 1
    k = (np.arange(length) - length // 2) / rate
    shape = np.exp(-((2 * np.pi * sigma * k) ** 2))
    shape /= np.sqrt(np.sum(shape**2))
    paths = []
    for _ in range(2):
        white = (rng.standard_normal((len(iq), m + length)) + 1j * rng.standard_normal((len(iq), m + length))) / 2
        slow = oaconvolve(white, shape[None], mode="valid", axes=1)
        at = np.arange(n) / RATE_HZ * rate
        i = at.astype(int)
        part = at - i
        paths.append(slow[:, i] * (1 - part) + slow[:, i + 1] * part)
    shift = round(delay_s * RATE_HZ)
    late = np.pad(iq, ((0, 0), (shift, 0)))[:, :n]
    return paths[0] * iq + paths[1] * late, paths[0] + paths[1]


def fading() -> None:
    head(
        "A3E through two-path fading (Watterson), depth 0.8, speech 100-2900 Hz",
        "delay ms, spread Hz",
        "C/N0 dB-Hz",
        "phase rms deg, power-weighted, median / worst",
        "hops over 60 deg, power-weighted",
        "locked",
    )
    message = voices(20.0, 100.0, 2900.0)
    for delay_ms, spread_hz in ((0.5, 0.1), (1.0, 0.5), (2.0, 1.0), (2.0, 3.0), (3.0, 10.0)):
        for cn0 in (70, 50):
            rng = np.random.default_rng(cn0)
            flat = np.ones((CHANNELS, message.shape[1]))
            tone, phase, _ = carriers(rng, 20.0)
            iq, gain = watterson(rng, flat * (1 + 0.8 * message), delay_ms / 1e3, spread_hz)
            iq = AMPLITUDE * tone * iq + noise(rng, tone.shape, AMPLITUDE**2 / 10 ** (cn0 / 10))
            run = follow(iq, FollowerSettings(Follow.CARRIER))
            hops = gain.shape[1] // run.hop
            path = gain[:, : hops * run.hop].reshape(CHANNELS, hops, run.hop).mean(axis=2)
            t = run.hop_time_s()[:hops]
            late = (t > 3.0) & (t < 19.5)
            error = 2 * np.pi * (run.track.phase_cycles[:, :hops] - phase(t)) - np.angle(path)
            error = np.degrees(np.angle(np.exp(1j * error)))[:, late]
            power = np.abs(path[:, late]) ** 2
            weighted = np.sqrt(np.sum(power * error**2, axis=1) / power.sum(axis=1))
            bad = np.sum(power * (np.abs(error) > 60)) / power.sum()
            row(
                f"{delay_ms}, {spread_hz}",
                cn0,
                f"{np.median(weighted):.2f} / {weighted.max():.2f}",
                float(bad),
                float(np.mean(run.track.lock[:, :hops][:, late] == Lock.LOCKED)),
            )


def quadrature_pairs() -> None:
    head(
        "Two voices in quadrature without a pilot (fourth power), phase folded to a quarter turn",
        "SNR dB",
        "first lock s, median / worst",
        "phase rms deg, median / worst",
        "locked",
    )
    one = voices(16.0, 100.0, 4500.0)
    other = np.roll(voices(16.0, 100.0, 4500.0), 5, axis=0)
    for snr_db in (40, 30, 20):
        rng = np.random.default_rng(snr_db)
        tone, phase, _ = carriers(rng, 16.0, reach_hz=50.0)
        density = np.mean(one**2 + other**2) / 10 ** (snr_db / 10) / 9000.0
        iq = AMPLITUDE * (tone * (one + 1j * other) + noise(rng, tone.shape, density))
        run = follow(iq, FollowerSettings(Follow.FOURTH_POWER, search_hz=100.0, message_hz=(100.0, 4500.0)))
        t = run.hop_time_s()
        late = (t > 6.0) & (t < 15.5)
        error = rms(run.phase_error_deg(phase, 4)[:, late])
        first = run.first_lock_s()
        locked = np.mean(run.track.lock[:, late] > 0)
        row(
            snr_db,
            f"{np.median(first):.2f} / {first.max():.2f}",
            f"{np.median(error):.2f} / {error.max():.2f}",
            float(locked),
        )


def speed() -> None:
    head("Cost of following at 12 kHz, 256 samples a call", "follow", "state", "channels", "ns/sample/channel")
    for kind in (Follow.CARRIER, Follow.PILOT, Follow.SQUARE):
        for state in ("locked", "searching"):
            for channels in (1, 20, 200):
                rng = np.random.default_rng(channels)
                n = int(5.0 * RATE_HZ)
                t = np.arange(n) / RATE_HZ
                message = np.repeat(rng.standard_normal(n // 4 + 1), 4)[:n] if kind is Follow.SQUARE else 1.0
                signal = message * np.exp(2j * np.pi * rng.uniform(-200, 200, (channels, 1)) * t)
                iq = (AMPLITUDE * signal * (state == "locked") + noise(rng, (channels, n), 1e-7)).astype(np.complex64)
                follower = CarrierFollower(FollowerSettings(kind), channels, RATE_HZ)
                blocks = [np.ascontiguousarray(iq[:, k : k + 256]) for k in range(0, n - 255, 256)]
                warm = int(0.6 * len(blocks))
                for piece in blocks[:warm]:
                    follower.process(piece)
                begin = time.process_time()
                for piece in blocks[warm:]:
                    follower.process(piece)
                spent = time.process_time() - begin
                row(kind.value, state, channels, float(1e9 * spent / (len(blocks) - warm) / 256 / channels))


TABLES = {
    "lock": lock_times,
    "jitter": jitter,
    "a3e": amplitude_modulated,
    "pilots": pilots,
    "tones": tones_beside_pilots,
    "suppressed": suppressed,
    "fades": fades,
    "fourth": quadrature_pairs,
    "noise": false_claims,
    "loss": losses,
    "keyed": keyed,
    "fading": fading,
    "speed": speed,
}
NEED_SPEECH = {"a3e", "pilots", "suppressed", "fades", "fading", "fourth"}


def main(names: list[str]) -> None:
    for name in names or list(TABLES):
        if name in NEED_SPEECH and not SPEECH.is_dir():
            print(f"\n({name}: left out, no speech in {SPEECH})")
            continue
        TABLES[name]()


if __name__ == "__main__":
    main(sys.argv[1:])
