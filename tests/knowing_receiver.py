"""A receiver that is told everything: carrier, phase, drift, slope of the vestige. What any other is measured against.

It works on the very samples the product gets, in one transform over the whole capture, with filters that are knives. It
shares nothing with the product but the law of each emission, written down here again from its definition.
"""

from __future__ import annotations

import numpy as np
import scipy.fft

from rxchain.synthesis.render import StationTruth
from rxchain.synthesis.scene import Scene, Station

BEAT_HZ = 700.0  # of keyed carriers, the interface's default
_TAPER_S = 0.2  # at each end of what is limited to a band, outside of what is scored


def upright(iq: np.ndarray, scene: Scene, station: Station, rate_hz: float) -> np.ndarray:
    """The whole capture turned by the true carrier and brought down to ``rate_hz``, a whole fraction of its own."""
    n, times = len(iq), round(scene.rate_hz / rate_hz)
    assert n % times == 0, "the capture must hold a whole number of samples at the lower rate"
    t = np.arange(n) / scene.rate_hz
    cycles = (station.frequency_hz + station.offset_hz - scene.centre_hz) * t + 0.5 * station.drift_hz_s * t * t
    cycles += station.phase_degrees / 360.0
    spectrum = scipy.fft.fft(iq * np.exp(-2j * np.pi * (cycles - np.floor(cycles))).astype(np.complex64))
    kept, half = np.zeros(n // times, np.complex64), n // times // 2
    kept[:half], kept[-half:] = spectrum[:half], spectrum[-half:]
    return scipy.fft.ifft(kept) / times


def known_messages(iq: np.ndarray, scene: Scene, truth: StationTruth) -> np.ndarray:
    """The messages of one station as well as they can be had from these samples; (messages, n), at the truth's rate."""
    station, rate_hz = truth.station, truth.message_rate_hz
    channel = upright(iq, scene, station, rate_hz)
    family = station.emission.family
    if family == "AM-STEREO":  # 47 CFR 73.128: envelope 1 + L + R at the phase atan((L - R) / (1 + L + R))
        channel = _within(channel, rate_hz, 3.0 * station.audio_hz[1])
        envelope = np.abs(channel)
        total, difference = envelope, envelope * np.tan(np.clip(np.angle(channel), -1.4, 1.4))
        return np.stack([_banded((total + s * difference) / 2, rate_hz, station.audio_hz) for s in (1, -1)])
    spectrum = scipy.fft.fft(channel)
    frequency_hz = scipy.fft.fftfreq(len(channel), 1.0 / rate_hz)
    messages = [np.real(scipy.fft.ifft(weight * spectrum)) for weight in _weights(station, frequency_hz)]
    if family == "A1A":
        note = np.exp(2j * np.pi * BEAT_HZ * np.arange(len(channel)) / rate_hz)
        messages = [np.real(_within(channel, rate_hz, BEAT_HZ - station.audio_hz[0]) * note)]
    return np.stack(messages)


def _weights(station: Station, frequency_hz: np.ndarray) -> list[np.ndarray]:
    low_hz, high_hz = station.audio_hz
    up = ((frequency_hz >= low_hz) & (frequency_hz <= high_hz)).astype(float)
    down = ((-frequency_hz >= low_hz) & (-frequency_hz <= high_hz)).astype(float)
    emission = station.emission
    if emission.is_double_sideband or emission.family == "A1A":
        return [up + down]
    if emission.family == "QAM":
        return [up + down, -1j * (up + down)]
    if emission.family == "B8E":
        return [up, down]
    whole, other = (up, down) if emission.side > 0 else (down, up)
    if not emission.is_vestigial:
        return [whole]
    # Two copies of each low frequency in equal noise, each weighted by its own gain (Brennan 1959).
    gain = _sent(emission.side * frequency_hz, station)
    mirrored = _sent(-emission.side * frequency_hz, station)
    return [(whole + other) * gain / np.maximum(gain**2 + mirrored**2, 1e-6)]


def _sent(frequency_hz: np.ndarray, station: Station) -> np.ndarray:
    vestige_hz = station.how.vestige_hz
    if station.how.vestige_is_flat:
        return (frequency_hz >= -vestige_hz).astype(float)
    return np.clip(0.5 + 0.5 * frequency_hz / vestige_hz, 0.0, 1.0)


def _within(channel: np.ndarray, rate_hz: float, half_hz: float) -> np.ndarray:
    spectrum = scipy.fft.fft(channel)
    spectrum[np.abs(scipy.fft.fftfreq(len(channel), 1.0 / rate_hz)) > half_hz] = 0
    return scipy.fft.ifft(spectrum)


def _banded(samples: np.ndarray, rate_hz: float, band_hz: tuple[float, float]) -> np.ndarray:
    spectrum = scipy.fft.rfft(samples)
    frequency_hz = scipy.fft.rfftfreq(len(samples), 1.0 / rate_hz)
    spectrum[(frequency_hz < band_hz[0]) | (frequency_hz > band_hz[1])] = 0
    return scipy.fft.irfft(spectrum, len(samples))


def audio_snr_db(
    audio: np.ndarray, rate_hz: float, truth: StationTruth, k: int, steady_s: tuple[float, float], in_band: bool = True
) -> float:
    """SNR of one message of the audio against the truth, fitted in amplitude, over the steady part.

    ``in_band``: noise counts within the message's band, as the summary's ``snr_db`` is defined; else all there is counts.
    Where nothing tells the phase (J3E, A1A), the constant phase of the carrier is fitted too.
    """
    station = truth.station
    heard = audio.astype(float)
    if in_band:  # what came before the lock must not ring into the part that counts
        t = np.arange(len(heard)) / rate_hz
        inside = np.minimum(t - steady_s[0], steady_s[1] - t) / _TAPER_S + 1.0
        heard = _banded(heard * np.sin(np.pi / 2 * np.clip(inside, 0.0, 1.0)) ** 2, rate_hz, station.audio_hz)
    message = _at_rate(truth.messages[k], truth.message_rate_hz, len(heard), rate_hz)
    n = len(message)
    known = [message]
    if station.emission.family == "J3E":
        known.append(np.imag(_analytic(message)))
    if station.emission.family == "A1A":
        turn = 2 * np.pi * BEAT_HZ * np.arange(n) / rate_hz
        known = [message * np.cos(turn), message * np.sin(turn)]
    steady = slice(int(steady_s[0] * rate_hz), min(n, int(steady_s[1] * rate_hz)))
    basis = np.stack([one[steady] for one in known], axis=1)
    amplitudes, *_ = np.linalg.lstsq(basis, heard[:n][steady], rcond=None)
    fitted = basis @ amplitudes
    return float(10 * np.log10(np.sum(fitted**2) / np.sum((heard[:n][steady] - fitted) ** 2)))


def _at_rate(message: np.ndarray, rate_hz: float, n: int, audio_rate_hz: float) -> np.ndarray:
    if rate_hz == audio_rate_hz:
        return message[:n]
    whole = round(len(message) / rate_hz * audio_rate_hz)
    spectrum, kept = np.fft.rfft(message), np.zeros(whole // 2 + 1, complex)
    m = min(len(kept), len(spectrum))
    kept[:m] = spectrum[:m]
    return (np.fft.irfft(kept, whole) * (whole / len(message)))[:n]


def _analytic(message: np.ndarray) -> np.ndarray:
    spectrum = np.fft.fft(message)
    spectrum[np.fft.fftfreq(len(message)) < 0] = 0
    return np.fft.ifft(2 * spectrum)
