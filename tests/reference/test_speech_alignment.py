"""The carrier of a single-sideband voice, against voices whose carrier was put in place by the test.

The synthetic voice is a harmonic series on a moving pitch through three formants, in syllables with pauses; the real
ones come from the folder of recordings. Every limit is the aim of the estimator, not what it happens to reach: it is
within 0.3 Hz for most voices.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile
from scipy.signal import resample_poly
from signals import hilbert

from rxchain.carrier.speech_aligner import SpeechAligner
from rxchain.carrier.speech_cepstrum import PitchCepstrum, _window_decay
from rxchain.carrier.speech_frames import SpeechFrames
from rxchain.carrier.track import Lock, Turned
from rxchain.errors import SettingError

RATE_HZ = 8_000.0
WIDE_HZ, NARROW_HZ = (300.0, 2_700.0), (600.0, 2_400.0)
CLOSE_HZ = 5.0  # hardly audible in speech, common practice
USABLE_HZ = 15.0
SYNTHETIC_HZ = 2.0  # the synthetic voice is regular: nothing excuses more
PASSBAND_HZ = 10.0
SLEW_HZ_PER_S = 200.0
FLOAT32 = 1e-5
VOICED_HEIGHT = 0.65  # the clearest voiced frames reach it; a perfect comb stands above them


def synthetic_voice(
    seconds: float, rate_hz: float, rng: np.random.Generator, mean_pitch_hz: float = 120.0
) -> np.ndarray:
    """Harmonics of a pitch that falls through each phrase and trembles, formants of an open vowel, syllables."""
    t = np.arange(int(seconds * rate_hz)) / rate_hz
    phrase = np.interp(t % 2.3, [0.0, 0.4, 1.8, 2.3], [1.0, 1.25, 0.85, 0.8])
    pitch_hz = mean_pitch_hz * phrase * (1.0 + 0.02 * np.sin(2 * np.pi * 5.5 * t))
    phase = 2 * np.pi * np.cumsum(pitch_hz) / rate_hz
    voice = np.zeros(len(t))
    for k in range(1, int(3_400.0 / mean_pitch_hz)):
        at_hz = k * pitch_hz
        gain = sum(peak / (1 + ((at_hz - hz) / 90.0) ** 2) for hz, peak in ((650, 1.0), (1_150, 0.6), (2_500, 0.3)))
        voice += (gain + 0.02) * np.cos(k * phase + rng.uniform(0, 2 * np.pi)) * (at_hz < 3_400)
    syllable = np.clip(np.sin(2 * np.pi * 3.1 * t) + 0.5, 0, 1) * (t % 2.3 < 1.9)
    return voice * syllable


def within(samples: np.ndarray, band_hz: tuple[float, float], rate_hz: float) -> np.ndarray:
    frequency_hz = np.fft.fftfreq(len(samples), 1 / rate_hz)
    return np.fft.ifft(np.where((frequency_hz >= band_hz[0]) & (frequency_hz <= band_hz[1]), np.fft.fft(samples), 0))


def upper_sideband(
    message: np.ndarray,
    offset_hz: float,
    snr_db: float,
    rng: np.random.Generator,
    band_hz: tuple[float, float] = WIDE_HZ,
    rate_hz: float = RATE_HZ,
) -> np.ndarray:
    """The message on a carrier ``offset_hz`` too high, noise in 300-2700 Hz as stated, through the receiver's band."""
    n = len(message)
    sent = within(message + 1j * hilbert(message), (150.0, 3_400.0), rate_hz)
    power = np.mean(np.abs(within(sent, WIDE_HZ, rate_hz)) ** 2)
    noise = rng.standard_normal((2, n)) * np.sqrt(power * 10 ** (-snr_db / 10) * rate_hz / 2_400.0 / 2)
    shifted = sent * np.exp(2j * np.pi * offset_hz * np.arange(n) / rate_hz) + noise[0] + 1j * noise[1]
    return (0.1 * within(shifted, band_hz, rate_hz) / np.sqrt(power)).astype(np.complex64)


def upper_aligner(n_channels: int, band_hz: tuple[float, float] = WIDE_HZ, rate_hz: float = RATE_HZ) -> SpeechAligner:
    return SpeechAligner(n_channels, rate_hz, [1] * n_channels, [band_hz] * n_channels)


def answers(channels: list[np.ndarray], band_hz: tuple[float, float] = WIDE_HZ, rate_hz: float = RATE_HZ) -> np.ndarray:
    """The offset held at the end, per channel; not a number where none was ever believed."""
    track = upper_aligner(len(channels), band_hz, rate_hz).process(np.stack(channels)).track
    return np.where(track.lock[:, -1] != Lock.NONE, track.offset_hz[:, -1], np.nan)


def joined(pieces: list[Turned]) -> tuple[np.ndarray, ...]:
    tracks = [piece.track for piece in pieces]
    return (
        np.concatenate([piece.iq for piece in pieces], axis=1),
        *(
            np.concatenate([getattr(track, name) for track in tracks], axis=1)
            for name in ("offset_hz", "phase_cycles", "lock")
        ),
    )


@pytest.fixture(scope="module")
def real_voices(shared_recordings: Path) -> list[np.ndarray]:
    """A woman, and a man reading three sentences."""
    voices = []
    for names in (("woman-30s-8k",), ("man-5s-16k", "man-6s-16k", "man-7s-16k")):
        pieces = []
        for name in names:
            samples, rate_hz = soundfile.read(shared_recordings / "speech" / f"{name}.wav")
            pieces.append(resample_poly(samples, int(RATE_HZ), int(rate_hz)))
        voices.append(np.concatenate(pieces))
    return voices


def ten_second_windows(voices: list[np.ndarray]) -> list[np.ndarray]:
    length = int(10 * RATE_HZ)
    return [
        voice[start : start + length] for voice in voices for start in range(0, len(voice) - length, int(2.5 * RATE_HZ))
    ]


def test_peak_of_the_cepstrum_is_the_pitch_and_its_phase_the_offset() -> None:
    """A log spectrum of raised cosines about ``offset + k pitch`` has its cepstrum's peak there in closed form."""
    frames = SpeechFrames(1, RATE_HZ, [1], [WIDE_HZ])
    cepstrum = PitchCepstrum(frames.frequency_hz, frames.frame_s)
    for pitch_hz, offset_hz in ((100.0, 20.0), (140.0, -45.0), (230.0, 90.0)):
        lines = 1.0 + np.cos(2 * np.pi * (frames.frequency_hz - offset_hz) / pitch_hz)
        peaks = cepstrum.peaks(lines[None].astype(np.float32))
        wrong = peaks.phase_cycles[0] - offset_hz / pitch_hz
        assert peaks.period_s[0] == pytest.approx(1 / pitch_hz, rel=0.02)
        assert abs(wrong - np.rint(wrong)) < 0.05
        assert peaks.height[0] > VOICED_HEIGHT


def test_window_decay_is_the_autocorrelation_of_the_window() -> None:
    n = 1_000
    window = np.sin(np.pi * (np.arange(n) + 0.5) / n) ** 2
    numeric = np.correlate(window, window, "full")[n - 1 :] / np.sum(window**2)
    np.testing.assert_allclose(_window_decay(np.arange(n) / n), numeric, atol=1e-5)


@pytest.mark.parametrize("rate_hz", [8_000.0, 12_001.1321, 48_000.0])
def test_synthetic_voice_is_found_on_both_sides_of_the_carrier(rate_hz: float, rng: np.random.Generator) -> None:
    """Mirrored for the lower sideband, where a carrier too high is a voice too low."""
    offsets_hz = np.array([-140.0, -33.0, 0.0, 71.0, 145.0, -90.0])
    message = synthetic_voice(8.0, rate_hz, rng)
    sides = [1, -1, 1, -1, 1, -1]
    channels = []
    for side, offset_hz in zip(sides, offsets_hz, strict=True):
        upper = upper_sideband(message, side * offset_hz, 20.0, rng, rate_hz=rate_hz)
        channels.append(upper if side > 0 else upper.conj())
    aligner = SpeechAligner(len(sides), rate_hz, sides, [WIDE_HZ] * len(sides))
    track = aligner.process(np.stack(channels)).track
    assert (track.lock[:, -1] != Lock.NONE).all()
    np.testing.assert_allclose(track.offset_hz[:, -1], offsets_hz, atol=SYNTHETIC_HZ)
    assert aligner.is_believed.all()


def test_turned_voice_lies_in_its_place(rng: np.random.Generator) -> None:
    """Against the same voice sent on its nominal carrier: what is left turns by no more than the error allowed."""
    message = synthetic_voice(12.0, RATE_HZ, rng)
    iq = upper_sideband(message, 60.0, 60.0, rng)
    in_place = upper_sideband(message, 0.0, 60.0, rng)
    turned = upper_aligner(1).process(iq[None]).iq[0]
    last = slice(int(10 * RATE_HZ), int(11 * RATE_HZ))
    beat = turned[last] * in_place[last].conj()
    residual_hz = np.fft.fftfreq(8 * len(beat), 1 / RATE_HZ)[np.argmax(np.abs(np.fft.fft(beat, 8 * len(beat))))]
    assert abs(residual_hz) < SYNTHETIC_HZ


def test_turning_never_clicks(rng: np.random.Generator) -> None:
    """Magnitudes stay, the phase is continuous, and the frequency glides no faster than it may."""
    iq = upper_sideband(synthetic_voice(6.0, RATE_HZ, rng), -120.0, 20.0, rng)[None]
    aligner = upper_aligner(1)
    turned = aligner.process(iq)
    n = turned.iq.shape[1]
    np.testing.assert_allclose(np.abs(turned.iq), np.abs(iq[:, :n]), atol=FLOAT32 * np.abs(iq).max())
    loud = np.abs(iq[0, :n]) > 0.02
    taken_out = np.angle(iq[0, :n] * turned.iq[0].conj()) / (2 * np.pi)
    step_cycles = np.diff(taken_out)[loud[1:] & loud[:-1]]
    assert np.abs(step_cycles - np.rint(step_cycles)).max() < 160.0 / RATE_HZ
    glide = np.abs(np.diff(turned.track.offset_hz[0])) / (aligner.hop_samples / RATE_HZ)
    assert 0 < glide.max() <= SLEW_HZ_PER_S * (1 + FLOAT32)


def test_answer_is_held_while_nobody_speaks(rng: np.random.Generator) -> None:
    speech = upper_sideband(synthetic_voice(8.0, RATE_HZ, rng), 45.0, 20.0, rng)
    noise = 0.1 * upper_sideband(rng.standard_normal(int(25 * RATE_HZ)), 0.0, 60.0, rng)
    aligner = upper_aligner(1)
    spoken = aligner.process(speech[None]).track
    silent = aligner.process(noise[None]).track
    seen = spoken.lock[0]
    assert seen[0] == Lock.NONE
    assert (spoken.offset_hz[0, seen == Lock.NONE] == 0).all()
    assert seen[-1] == Lock.LOCKED
    assert (silent.lock[0, silent.lock.shape[1] // 5 :] == Lock.HELD).all()
    np.testing.assert_allclose(silent.offset_hz, 45.0, atol=SYNTHETIC_HZ)


def test_new_station_is_taken_over(rng: np.random.Generator) -> None:
    first = upper_sideband(synthetic_voice(8.0, RATE_HZ, rng), 70.0, 20.0, rng)
    second = upper_sideband(synthetic_voice(15.0, RATE_HZ, rng, mean_pitch_hz=190.0), -30.0, 20.0, rng)
    track = upper_aligner(1).process(np.concatenate([first, second])[None]).track
    np.testing.assert_allclose(track.offset_hz[0, int(7.5 * RATE_HZ) // 40], 70.0, atol=SYNTHETIC_HZ)
    np.testing.assert_allclose(track.offset_hz[0, -1], -30.0, atol=SYNTHETIC_HZ)


def test_monotone_voice_gives_no_wrong_answer(rng: np.random.Generator) -> None:
    """A pitch that never moves leaves its own multiples open: only 'cannot tell' or the truth will do."""
    t = np.arange(int(12 * RATE_HZ)) / RATE_HZ
    monotone = sum(np.cos(2 * np.pi * 110.0 * k * t + rng.uniform(0, 6)) for k in range(2, 30))
    syllables = monotone * (np.sin(2 * np.pi * 3 * t) > -0.3)
    channels = [upper_sideband(syllables, offset_hz, 25.0, rng) for offset_hz in (-80.0, 10.0, 120.0)]
    found_hz = answers(channels)
    assert (np.isnan(found_hz) | (np.abs(found_hz - [-80.0, 10.0, 120.0]) < USABLE_HZ)).all()


def test_no_answer_without_a_voice(rng: np.random.Generator) -> None:
    """Noise, noise in syllables, steady tones, hum, keyed tones, shift keying, a sweep, silence; none may be answered."""
    n = int(12 * RATE_HZ)
    t = np.arange(n) / RATE_HZ
    bits = np.repeat(rng.integers(0, 2, n // 176 + 1), 176)[:n]
    noise = rng.standard_normal(n)
    signals = {
        "noise": noise,
        "noise in syllables": noise * np.clip(np.sin(2 * np.pi * 3 * t) + 0.3, 0, 1),
        "a tone": np.sin(2 * np.pi * 1_000 * t),
        "two tones": np.sin(2 * np.pi * 700 * t) + np.sin(2 * np.pi * 1_900 * t),
        "hum": sum(np.sin(2 * np.pi * 50 * k * t + k * k) for k in range(6, 50)),
        "keyed tone": bits * np.sin(2 * np.pi * 800 * t),
        "shift keying": np.sin(2 * np.pi * np.cumsum(1_275 + 170.0 * bits) / RATE_HZ),
        "phase keying": (2.0 * bits - 1.0) * np.sin(2 * np.pi * 1_500 * t),
        "sweep": np.sin(2 * np.pi * np.cumsum(300 + 2_400 * (t % 1.0)) / RATE_HZ),
    }
    channels = [upper_sideband(signal, 20.0, 20.0, rng) for signal in signals.values()]
    track = upper_aligner(len(channels) + 1).process(np.stack([*channels, np.zeros(n, np.complex64)])).track
    answered = dict(zip([*signals, "silence"], (track.lock != Lock.NONE).any(axis=1), strict=True))
    assert not any(answered.values()), answered
    assert not track.offset_hz.any()


def test_real_speech_is_close_at_20_db_and_usable_at_6_db(
    real_voices: list[np.ndarray], rng: np.random.Generator
) -> None:
    """A window without an answer counts as a miss."""
    cuts = ten_second_windows(real_voices)
    offsets_hz = np.linspace(-150.0, 150.0, len(cuts))[rng.permutation(len(cuts))]
    for snr_db, limit_hz, least_share in ((20.0, CLOSE_HZ, 0.9), (6.0, USABLE_HZ, 0.8)):
        found_hz = answers(
            [upper_sideband(cut, offset_hz, snr_db, rng) for cut, offset_hz in zip(cuts, offsets_hz, strict=True)]
        )
        assert np.mean(np.abs(found_hz - offsets_hz) < limit_hz) >= least_share, (snr_db, found_hz - offsets_hz)


def test_passband_does_not_move_the_answer(real_voices: list[np.ndarray], rng: np.random.Generator) -> None:
    cuts = ten_second_windows(real_voices)
    offsets_hz = np.linspace(-140.0, 140.0, len(cuts))
    wide_hz, narrow_hz = (
        answers([upper_sideband(cut, hz, 25.0, rng, band) for cut, hz in zip(cuts, offsets_hz, strict=True)], band)
        for band in (WIDE_HZ, NARROW_HZ)
    )
    both = np.isfinite(wide_hz) & np.isfinite(narrow_hz)
    assert both.mean() > 0.5
    assert np.abs(wide_hz - narrow_hz)[both].max() < PASSBAND_HZ


def test_any_split_gives_the_same_stream(rng: np.random.Generator) -> None:
    voice = upper_sideband(synthetic_voice(4.0, RATE_HZ, rng), 25.0, 20.0, rng)
    iq = np.stack([voice, np.roll(voice, 3_000).conj()])
    aligner = SpeechAligner(2, RATE_HZ, [1, -1], [WIDE_HZ, NARROW_HZ])
    whole = joined([aligner.process(iq), aligner.flush()])
    cuts = np.sort(np.concatenate([rng.integers(0, iq.shape[1], 60), [1, 1, 2, 240, 241]]))
    split = joined([*(aligner.process(piece) for piece in np.split(iq, cuts, axis=1)), aligner.flush()])
    assert whole[0].shape == iq.shape
    assert whole[0].dtype == np.complex64
    assert (whole[3] == Lock.LOCKED).any()
    for one, other in zip(whole, split, strict=True):
        np.testing.assert_array_equal(one, other)
    assert aligner.flush().iq.shape == (2, 0)


def test_what_is_not_a_number_does_not_stick(rng: np.random.Generator) -> None:
    voice = upper_sideband(synthetic_voice(8.0, RATE_HZ, rng), 25.0, 20.0, rng)
    voice[500:520] = np.nan
    track = upper_aligner(1).process(voice[None]).track
    np.testing.assert_allclose(track.offset_hz[0, -1], 25.0, atol=SYNTHETIC_HZ)


@pytest.mark.parametrize(
    ("changed", "name"),
    [
        ({"rate_hz": 4_000.0}, "rate_hz"),
        ({"sides": [1]}, "sides"),
        ({"sides": [1, 0]}, "sides"),
        ({"audio_hz": [WIDE_HZ]}, "audio_hz"),
        ({"audio_hz": [WIDE_HZ, (900.0, 300.0)]}, "audio_hz"),
    ],
)
def test_bad_settings_are_named(changed: dict, name: str) -> None:
    settings = {"n_channels": 2, "rate_hz": RATE_HZ, "sides": [1, -1], "audio_hz": [WIDE_HZ, WIDE_HZ]}
    with pytest.raises(SettingError, match=f"^{name}="):
        SpeechAligner(**(settings | changed))


def test_blocks_of_another_shape_are_refused() -> None:
    with pytest.raises(SettingError, match=r"^iq="):
        upper_aligner(2).process(np.zeros((1, 100), np.complex64))
