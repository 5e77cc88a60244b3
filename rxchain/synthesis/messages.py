"""Messages to modulate with: tones, noise, recorded sound, keyed text, silence.

A message is float64, (n,), at the synthesis rate; its peak is 1 (silence apart), so that depth and peak envelope power
mean what they say.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from rxchain.errors import SettingError
from rxchain.streams import Floats

KINDS = ("tone", "tones", "noise", "sound", "morse", "silence")

# International Morse code: Recommendation ITU-R M.1677-1. A dash lasts three dots, a letter gap three, a word gap seven.
_MORSE = dict(
    zip(
        "ABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789/=?.,",
        (
            ".- -... -.-. -.. . ..-. --. .... .. .--- -.- .-.. -- -. --- .--. --.- .-. ... - ..- ...- .-- -..- -.-- --.. "
            "----- .---- ..--- ...-- ....- ..... -.... --... ---.. ----. -..-. -...- ..--.. .-.-.- --..--"
        ).split(),
        strict=True,
    )
)
_KEYING_EDGE_S = 0.005


@dataclass(frozen=True, slots=True)
class Message:
    """What a message is made of.

    frequencies_hz : of the tones, equally strong. path : of the sound file; start_s : where in it the message begins; it
        is repeated to fill the time. text, words_per_minute : of keyed text (a word is PARIS, 50 dots), repeated too.
    """

    kind: str
    frequencies_hz: tuple[float, ...] = ()
    path: Path | None = None
    start_s: float = 0.0
    text: str = ""
    words_per_minute: float = 18.0


def make_message(message: Message, n: int, rate_hz: float, band_hz: tuple[float, float], seed: int) -> Floats:
    """``n`` samples of the message within its band; the same for the same seed."""
    match message.kind:
        case "silence":
            return np.zeros(n)
        case "morse":
            return _keyed(message.text, message.words_per_minute, n, rate_hz)
        case "tone" | "tones":
            t = np.arange(n) / rate_hz
            waves = [np.cos(2 * np.pi * f * t) for f in message.frequencies_hz]
            return np.asarray(np.sum(waves, axis=0) / len(waves))
        case "noise":
            return _normalised(band_limited(np.random.default_rng(seed).standard_normal(n), rate_hz, band_hz))
        case _:
            return _normalised(band_limited(_sound(message, n, rate_hz), rate_hz, band_hz))


def band_limited(samples: Floats, rate_hz: float, band_hz: tuple[float, float]) -> Floats:
    """The samples without anything outside the band; its edges fall over 20 Hz inside it, so that they ring little."""
    spectrum = np.fft.rfft(samples)
    frequency_hz = np.fft.rfftfreq(len(samples), 1.0 / rate_hz)
    low_hz, high_hz = band_hz
    edge_hz = min(20.0, (high_hz - low_hz) / 4.0)
    inside = np.clip(np.minimum(frequency_hz - low_hz, high_hz - frequency_hz) / edge_hz, 0.0, 1.0)
    return np.asarray(np.fft.irfft(spectrum * np.sin(np.pi / 2 * inside) ** 2, len(samples)))


def resampled(samples: Floats, n: int) -> Floats:
    """The same stretch of time in ``n`` samples, exact for what both rates can hold (the stretch taken as periodic)."""
    spectrum = np.fft.rfft(samples)
    kept = np.zeros(n // 2 + 1, complex)
    m = min(len(kept), len(spectrum)) - 1
    kept[:m] = spectrum[:m]
    return np.asarray(np.fft.irfft(kept, n) * (n / len(samples)))


def _sound(message: Message, n: int, rate_hz: float) -> Floats:
    import soundfile

    try:
        samples, file_rate = soundfile.read(message.path, dtype="float64", always_2d=True)
    except (soundfile.LibsndfileError, OSError) as error:
        raise SettingError("path", message.path, "must be a sound file that can be read", str(error)) from error
    mono = samples.mean(axis=1)
    first = round(message.start_s * file_rate)
    if first >= len(mono):
        raise SettingError("start_s", message.start_s, f"the file is {len(mono) / file_rate:.1f} s long")
    wanted = int(np.ceil(n * file_rate / rate_hz)) + 1
    repeated = np.resize(np.roll(mono, -first), wanted)
    # A whole number of samples at both rates, as nearly as the rates allow; the difference is under a sample.
    return resampled(repeated, round(wanted * rate_hz / file_rate))[:n]


def _keyed(text: str, words_per_minute: float, n: int, rate_hz: float) -> Floats:
    dot_s = 1.2 / words_per_minute
    units: list[int] = []
    for letter in text.upper() + " ":
        if letter == " ":
            units += [0] * 4
        elif letter in _MORSE:
            for mark in _MORSE[letter]:
                units += [1] * (1 if mark == "." else 3) + [0]
            units += [0] * 2
        else:
            raise SettingError("text", text, f"{letter!r} has no Morse code here")
    at = (np.arange(n) / rate_hz / dot_s).astype(np.int64) % len(units)
    keyed = np.array(units, dtype=np.float64)[at]
    edge = np.hanning(max(3, round(2 * _KEYING_EDGE_S * rate_hz)) | 1)
    return np.asarray(np.convolve(keyed, edge / edge.sum(), mode="same"))


def _normalised(samples: Floats) -> Floats:
    peak = np.max(np.abs(samples), initial=0.0)
    return samples / peak if peak > 0 else samples
