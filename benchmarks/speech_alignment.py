"""Measure the alignment of single-sideband speech: accuracy, passbands, signals that are no speech, streams, cost.

Prints markdown tables. Voices and music come from ``../shared/recordings/speech`` beside the repository; recordings of
further voices can be named. Usage::

    python benchmarks/speech_alignment.py [--voices FILE ...] [table ...]
"""

from __future__ import annotations

import argparse
import time
from fractions import Fraction
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray
from scipy.signal import hilbert, resample_poly

from rxchain.carrier.speech_aligner import SpeechAligner
from rxchain.carrier.track import Lock

SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
RATE_HZ = 8_000.0
TRANSMITTED_HZ = (150.0, 3_400.0)
PASSBANDS_HZ = ((300.0, 2_700.0), (600.0, 2_400.0))
OFFSETS_HZ = 150.0  # drawn evenly to both sides
SNR_BAND_HZ = (300.0, 2_700.0)  # mean speech power there, pauses included, over the noise there

Floats = NDArray[np.float64]
Complex = NDArray[np.complex64]


def load(*paths: Path, rate_hz: float = RATE_HZ) -> Floats:
    """Recordings one after the other, mono."""
    pieces = []
    for path in paths:
        samples, file_rate_hz = soundfile.read(path)
        mono = samples.mean(axis=1) if samples.ndim > 1 else samples
        ratio = Fraction(rate_hz / file_rate_hz).limit_denominator(2_000)
        pieces.append(resample_poly(mono, ratio.numerator, ratio.denominator))
    return np.concatenate(pieces)


def real_voices() -> dict[str, Floats]:
    """The woman, and the man's three recordings as one."""
    return {
        "woman": load(SPEECH / "woman-30s-8k.wav"),
        "man": load(*(SPEECH / f"man-{name}-16k.wav" for name in ("5s", "6s", "7s"))),
    }


def within(
    samples: NDArray[np.complexfloating], band_hz: tuple[float, float], rate_hz: float
) -> NDArray[np.complex128]:
    """What lies in a band of the upper side, cut with a knife."""
    spectrum = np.fft.fft(samples)
    frequency_hz = np.fft.fftfreq(len(samples), 1.0 / rate_hz)
    return np.fft.ifft(np.where((frequency_hz >= band_hz[0]) & (frequency_hz <= band_hz[1]), spectrum, 0.0))


def received(
    message: Floats,
    offset_hz: float,
    passband_hz: tuple[float, float],
    snr_db: float,
    rng: np.random.Generator,
    rate_hz: float = RATE_HZ,
) -> Complex:
    """Upper sideband, its carrier ``offset_hz`` above nominal, in white noise, through the receiver's passband."""
    sent = within(hilbert(message), TRANSMITTED_HZ, rate_hz)
    power = np.mean(np.abs(within(sent, SNR_BAND_HZ, rate_hz)) ** 2)
    shifted = sent * np.exp(2j * np.pi * offset_hz / rate_hz * np.arange(len(sent)))
    noise = rng.standard_normal((2, len(sent))) * np.sqrt(
        0.5 * power * 10.0 ** (-snr_db / 10.0) * rate_hz / (SNR_BAND_HZ[1] - SNR_BAND_HZ[0])
    )
    return (0.1 * within(shifted + noise[0] + 1j * noise[1], passband_hz, rate_hz) / np.sqrt(power)).astype(
        np.complex64
    )


def windows(message: Floats, window_s: float, copies: int) -> list[Floats]:
    """Overlapping cuts, each ``copies`` times over."""
    length = int(window_s * RATE_HZ)
    starts = range(0, len(message) - length + 1, int(2.5 * RATE_HZ))
    return [message[start : start + length] for start in starts] * copies


def aligned(channels: list[Complex], passband_hz: tuple[float, float], rate_hz: float = RATE_HZ) -> SpeechAligner:
    """An aligner that has heard the channels."""
    n_channels = len(channels)
    aligner = SpeechAligner(n_channels, rate_hz, [1] * n_channels, [passband_hz] * n_channels)
    aligner.process(np.stack(channels))
    return aligner


def accuracy(voices: dict[str, Floats]) -> None:
    """Share of windows whose held offset is right; a window without an answer counts as wrong in the first two."""
    print("#### Windows of speech, offsets evenly within 150 Hz: share of all windows, %\n")
    print(
        "| voice | seconds | passband, Hz | SNR, dB | windows | within 5 Hz | within 15 Hz | answered | wrong answers |"
    )
    print("| --- | --- | --- | --- | --- | --- | --- | --- | --- |")
    for name, message in voices.items():
        for window_s in (5.0, 10.0):
            for passband_hz in PASSBANDS_HZ:
                for snr_db in (20.0, 10.0, 6.0):
                    rng = np.random.default_rng(31)
                    cuts = windows(message, window_s, 4)
                    offsets_hz = rng.uniform(-OFFSETS_HZ, OFFSETS_HZ, len(cuts))
                    channels = [
                        received(cut, offset_hz, passband_hz, snr_db, rng)
                        for cut, offset_hz in zip(cuts, offsets_hz, strict=True)
                    ]
                    aligner = aligned(channels, passband_hz)
                    has_answer = _has_answered(aligner)
                    error_hz = np.abs(aligner.offset_hz - offsets_hz)
                    shares = (
                        has_answer & (error_hz < 5.0),
                        has_answer & (error_hz < 15.0),
                        has_answer,
                        has_answer & (error_hz >= 15.0),
                    )
                    band = f"{passband_hz[0]:g}-{passband_hz[1]:g}"
                    figures = " | ".join(f"{100.0 * share.mean():.0f}" for share in shares)
                    print(f"| {name} | {window_s:g} | {band} | {snr_db:g} | {len(cuts)} | {figures} |")
    print()


def passbands(voices: dict[str, Floats]) -> None:
    """The same speech and offset through two passbands."""
    print("#### Change of the answer from 300-2700 to 600-2400 Hz, 10 s\n")
    print("| voice | SNR, dB | pairs answered | mean, Hz | greatest, Hz |\n| --- | --- | --- | --- | --- |")
    for name, message in voices.items():
        for snr_db in (60.0, 20.0):
            both = []
            for passband_hz in PASSBANDS_HZ:
                rng = np.random.default_rng(32)
                cuts = windows(message, 10.0, 4)
                offsets_hz = rng.uniform(-OFFSETS_HZ, OFFSETS_HZ, len(cuts))
                channels = [
                    received(cut, offset_hz, passband_hz, snr_db, rng)
                    for cut, offset_hz in zip(cuts, offsets_hz, strict=True)
                ]
                aligner = aligned(channels, passband_hz)
                both.append(np.where(_has_answered(aligner), aligner.offset_hz, np.nan))
            change_hz = (both[1] - both[0])[np.isfinite(both[0] + both[1])]
            pairs = f"{len(change_hz)} of {len(cuts)}"
            print(f"| {name} | {snr_db:g} | {pairs} | {change_hz.mean():.2f} | {np.abs(change_hz).max():.1f} |")
    print()


def no_speech(_: dict[str, Floats]) -> None:
    """Signals that have no voice: an answer at any time in 20 s is one too many."""
    print("#### Not speech, 40 runs of 20 s each at 10 to 30 dB: share with an answer at any time, %\n")
    print("| signal | answered |\n| --- | --- |")
    rng = np.random.default_rng(33)
    for name, make in NO_SPEECH.items():
        channels = [
            received(make(int(20 * RATE_HZ), rng), rng.uniform(-50, 50), PASSBANDS_HZ[0], rng.uniform(10, 30), rng)
            for _ in range(40)
        ]
        print(f"| {name} | {100.0 * _has_answered(aligned(channels, PASSBANDS_HZ[0])).mean():.0f} |")
    print()


def music(_: dict[str, Floats]) -> None:
    """A loop of music, played over and over; an answer within 15 Hz of its shift is right."""
    print("#### Music loop, shifted, 20 s at 20 dB, 40 runs, %\n")
    print("| answered | rightly |\n| --- | --- |")
    rng = np.random.default_rng(34)
    loop = np.tile(load(SPEECH / "music-8s-44k1-stereo.flac"), 4)
    starts = rng.integers(0, len(loop) - int(20 * RATE_HZ), 40)
    offsets_hz = rng.uniform(-OFFSETS_HZ, OFFSETS_HZ, 40)
    channels = [
        received(loop[start : start + int(20 * RATE_HZ)], offset_hz, PASSBANDS_HZ[0], 20.0, rng)
        for start, offset_hz in zip(starts, offsets_hz, strict=True)
    ]
    aligner = aligned(channels, PASSBANDS_HZ[0])
    has_answer = _has_answered(aligner)
    right = has_answer & (np.abs(aligner.offset_hz - offsets_hz) < 15.0)
    print(f"| {100.0 * has_answer.mean():.0f} | {100.0 * right.mean():.0f} |\n")


def streams(voices: dict[str, Floats]) -> None:
    """First answers, silence, and a new station."""
    print(
        "#### Streams at 15 dB: first answer, 50 s of noise after 15 s of speech, a new station on the same channel\n"
    )
    print(
        "| voice | first answer, s (median / worst) | within 5 Hz at the end of the noise, % "
        "| new station's offset 15 s later, % | the old one's, % | any other, % |"
    )
    print("| --- | --- | --- | --- | --- | --- |")
    names = list(voices)
    for name, other in zip(names, names[1:] + names[:1], strict=True):
        rng = np.random.default_rng(35)
        n_channels, length = 24, int(15 * RATE_HZ)
        first_hz = rng.uniform(-OFFSETS_HZ, OFFSETS_HZ, n_channels)
        apart_hz = rng.uniform(30.0, 2.0 * OFFSETS_HZ - 30.0, n_channels)
        second_hz = (first_hz + apart_hz + OFFSETS_HZ) % (2.0 * OFFSETS_HZ) - OFFSETS_HZ
        speech = [received(_cut(voices[name], length, rng), hz, PASSBANDS_HZ[0], 15.0, rng) for hz in first_hz]
        next_speech = [received(_cut(voices[other], length, rng), hz, PASSBANDS_HZ[0], 15.0, rng) for hz in second_hz]
        level = 0.1 * 10.0 ** (-15.0 / 20.0)
        noise = [
            (level * received(rng.standard_normal(int(50 * RATE_HZ)), 0.0, PASSBANDS_HZ[0], 40.0, rng) / 0.1)
            for _ in range(n_channels)
        ]
        aligner = SpeechAligner(n_channels, RATE_HZ, [1] * n_channels, [PASSBANDS_HZ[0]] * n_channels)
        track = aligner.process(np.stack(speech)).track
        aligner.process(np.stack(noise).astype(np.complex64))
        held = np.abs(aligner.offset_hz - first_hz) < 5.0
        is_known = track.lock != Lock.NONE
        first_s = np.where(is_known.any(axis=1), is_known.argmax(axis=1) * aligner.hop_samples / RATE_HZ, np.inf)
        aligner.reset()
        aligner.process(np.concatenate([np.stack(speech), np.stack(next_speech)], axis=1))
        is_new, is_old = (np.abs(aligner.offset_hz - hz) < 15.0 for hz in (second_hz, first_hz))
        others = ~is_new & ~is_old
        figures = " | ".join(f"{100.0 * share.mean():.0f}" for share in (held, is_new, is_old, others))
        print(f"| {name} | {np.median(first_s):.1f} / {first_s.max():.1f} | {figures} |")
    print()


def rates(voices: dict[str, Floats]) -> None:
    """The channel's rate makes no difference."""
    print("#### Error of the answer by the channel's rate, 10 s at 20 dB, Hz; 300-2700 Hz\n")
    print("| voice | rate, Hz | answered of 8 | median size | greatest |\n| --- | --- | --- | --- | --- |")
    for name, message in voices.items():
        for rate_hz in (6_000.0, 8_000.0, 12_000.0, 12_001.1321, 16_000.0, 24_000.0, 48_000.0):
            rng = np.random.default_rng(36)
            offsets_hz = rng.uniform(-OFFSETS_HZ, OFFSETS_HZ, 8)
            up = Fraction(rate_hz / RATE_HZ).limit_denominator(500)
            start = int(2 * RATE_HZ)
            cut = resample_poly(message[start : start + int(10 * RATE_HZ)], up.numerator, up.denominator)
            channels = [received(cut, hz, PASSBANDS_HZ[0], 20.0, rng, rate_hz) for hz in offsets_hz]
            aligner = aligned(channels, PASSBANDS_HZ[0], rate_hz)
            has_answer = _has_answered(aligner)
            error_hz = np.abs(aligner.offset_hz - offsets_hz)[has_answer]
            print(f"| {name} | {rate_hz:g} | {has_answer.sum()} | {np.median(error_hz):.2f} | {error_hz.max():.2f} |")
    print()


def cost(_: dict[str, Floats]) -> None:
    """Seconds of CPU time for a second of one channel."""
    print("#### CPU time, microseconds for a second of one channel\n")
    print("| rate, Hz | channels | all | turning alone |\n| --- | --- | --- | --- |")
    rng = np.random.default_rng(37)
    for rate_hz in (8_000.0, 12_000.0):
        for n_channels in (1, 16, 128):
            signal_s = 2.0 if n_channels > 100 else 8.0
            shape = (n_channels, int(signal_s * rate_hz))
            iq = (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)).astype(np.complex64)
            aligner = SpeechAligner(n_channels, rate_hz, [1] * n_channels, [PASSBANDS_HZ[0]] * n_channels)
            step = 6 * aligner.hop_samples
            begun = time.process_time()
            aligner.process(iq)
            middle = time.process_time()
            for start in range(0, shape[1] - step, step):
                aligner._turn(iq[:, start : start + step])
            turning = time.process_time() - middle
            per_channel = 1e6 / signal_s / n_channels
            print(
                f"| {rate_hz:g} | {n_channels} | {(middle - begun) * per_channel:.0f} | {turning * per_channel:.0f} |"
            )
    print()


def _has_answered(aligner: SpeechAligner) -> NDArray[np.bool_]:
    """Whether an answer was ever believed: only then is the offset other than 0."""
    return aligner.offset_hz != 0.0


def _cut(message: Floats, length: int, rng: np.random.Generator) -> Floats:
    start = rng.integers(0, len(message) - length)
    return message[start : start + length]


def _white(n: int, rng: np.random.Generator) -> Floats:
    return rng.standard_normal(n)


def _pink(n: int, rng: np.random.Generator) -> Floats:
    return np.fft.irfft(np.fft.rfft(rng.standard_normal(n)) / np.sqrt(np.arange(n // 2 + 1) + 1.0), n)


def _syllables(n: int, rng: np.random.Generator) -> Floats:
    """Noise that comes and goes a few times a second, as speech does."""
    points = np.abs(rng.standard_normal(n // 1_600 + 2))
    return rng.standard_normal(n) * np.interp(np.arange(n) / 1_600.0, np.arange(len(points)), points)


def _crackle(n: int, rng: np.random.Generator) -> Floats:
    return np.where(rng.random(n) < 0.003, rng.standard_normal(n), 0.0)


def _tone(n: int, rng: np.random.Generator) -> Floats:
    return np.sin(2.0 * np.pi * rng.uniform(400.0, 2_400.0) / RATE_HZ * np.arange(n))


def _two_tones(n: int, rng: np.random.Generator) -> Floats:
    return _tone(n, rng) + _tone(n, rng)


def _hum(n: int, rng: np.random.Generator) -> Floats:
    return sum(np.sin(2.0 * np.pi * k * 100.0 / RATE_HZ * np.arange(n) + rng.uniform(0, 6)) for k in range(3, 28))


def _keyed(n: int, rng: np.random.Generator) -> Floats:
    """On-off keying with elements of 60 ms."""
    return _tone(n, rng) * np.repeat(rng.integers(0, 2, n // 480 + 1), 480)[:n]


def _shift_keyed(n: int, rng: np.random.Generator, shift_hz: float, baud: float, n_tones: int = 2) -> Floats:
    symbols = rng.integers(0, n_tones, int(n * baud / RATE_HZ) + 2)
    tone = symbols[(np.arange(n) * baud / RATE_HZ).astype(int)]
    return np.sin(2.0 * np.pi * np.cumsum(rng.uniform(700.0, 1_300.0) + tone * shift_hz) / RATE_HZ)


def _phase_keyed(n: int, rng: np.random.Generator, baud: float) -> Floats:
    symbols = rng.integers(0, 2, int(n * baud / RATE_HZ) + 2) * 2.0 - 1.0
    at = np.arange(n) * baud / RATE_HZ
    return _tone(n, rng) * np.interp(at, np.arange(len(symbols)), symbols)


def _many_carriers(n: int, rng: np.random.Generator) -> Floats:
    """Orthogonal carriers 50 Hz apart, four phases, a guard interval of a quarter."""
    blocks = []
    while len(blocks) * 200 < n:
        spectrum = np.zeros(81, np.complex128)
        spectrum[8:52] = np.exp(0.5j * np.pi * rng.integers(0, 4, 44))
        block = np.fft.irfft(spectrum, 160)
        blocks.append(np.concatenate([block[-40:], block]))
    return np.concatenate(blocks)[:n]


def _picture(n: int, rng: np.random.Generator) -> Floats:
    """Slow-scan lines: a synchronizing tone of 1200 Hz, then 1500 to 2300 Hz by the brightness of random patches."""
    line = int(RATE_HZ * rng.uniform(0.06, 0.5))
    patches = rng.random((n // line // 12 + 1, 8))
    brightness = np.repeat(np.repeat(patches, line // 8, axis=1), 12, axis=0)
    frequency_hz = 1_500.0 + 800.0 * brightness
    frequency_hz[:, : line // 16] = 1_200.0
    frequency_hz = np.resize(frequency_hz.ravel(), n)
    return np.sin(2.0 * np.pi * np.cumsum(frequency_hz) / RATE_HZ)


NO_SPEECH = {
    "white noise": _white,
    "pink noise": _pink,
    "noise in syllables": _syllables,
    "crackle": _crackle,
    "one tone": _tone,
    "two tones": _two_tones,
    "hum, 25 harmonics": _hum,
    "on-off keying": _keyed,
    "two tones 170 Hz apart, 45 baud": lambda n, rng: _shift_keyed(n, rng, 170.0, 45.45),
    "two tones 850 Hz apart, 50 baud": lambda n, rng: _shift_keyed(n, rng, 850.0, 50.0),
    "sixteen tones, 15.6 baud": lambda n, rng: _shift_keyed(n, rng, 15.625, 15.625, 16),
    "two phases, 31 baud": lambda n, rng: _phase_keyed(n, rng, 31.25),
    "two phases, 1200 baud": lambda n, rng: _phase_keyed(n, rng, 1_200.0),
    "44 carriers, four phases": _many_carriers,
    "slow-scan picture": _picture,
}
TABLES = {table.__name__: table for table in (accuracy, passbands, no_speech, music, streams, rates, cost)}


def main() -> None:
    """Print the tables asked for, or all."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--voices", nargs="+", type=Path, default=[], help="recordings of further voices")
    parser.add_argument("tables", nargs="*", help=f"any of {', '.join(TABLES)}")
    arguments = parser.parse_args()
    voices = {path.stem: load(path) for path in arguments.voices} or real_voices()
    for name in arguments.tables or TABLES:
        TABLES[name](voices)


if __name__ == "__main__":
    main()
