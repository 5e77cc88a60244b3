"""Gain control, squelch, gate and rate conversion against what they say of themselves."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from signals import noise_message, through

from rxchain.audio.gain_control import GainControl, GainSettings
from rxchain.audio.rate_conversion import RateConverter
from rxchain.audio.squelch import Gate, Squelch

RATE_HZ = 12_000.0
AUTOMATIC = np.array([np.nan])
TARGET = 10 ** (-6.0 / 20)
ROUNDING = 1e-5  # single precision gains


def levelled(audio, fixed_db=AUTOMATIC):
    return through(GainControl(GainSettings(), fixed_db, 1, RATE_HZ), audio.astype(np.float32)[None, None])[0, 0]


@given(
    levels_db=st.lists(st.floats(-90.0, 0.0), min_size=2, max_size=8),
    n=st.integers(50, 3_000),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=30, deadline=None)
def test_peaks_never_pass_the_target(levels_db, n, seed):
    """However the level steps: the gain is down before the peak is there."""
    rng = np.random.default_rng(seed)
    audio = np.concatenate([10 ** (level_db / 20) * rng.uniform(-1, 1, n) for level_db in levels_db])
    assert np.abs(levelled(audio)).max() <= TARGET * (1 + ROUNDING)


@pytest.mark.parametrize("level_db", [-70.0, -40.0, -6.0, 0.0, 20.0])
def test_a_steady_level_comes_out_at_the_target(level_db):
    audio = 10 ** (level_db / 20) * np.cos(2 * np.pi * 1_000.0 * np.arange(24_000) / RATE_HZ)
    assert np.abs(levelled(audio)[-6_000:]).max() == pytest.approx(TARGET, rel=1e-3)


def test_gain_comes_back_at_20_db_a_second_and_no_further_than_80_db():
    """The release and the gain for silence that the settings name."""
    t = np.arange(int(6 * RATE_HZ)) / RATE_HZ
    audio = np.cos(2 * np.pi * 1_000.0 * t) * np.where(t < 1.0, 1.0, 1e-4)
    heard = levelled(audio)

    def gain_db(at_s):
        piece = slice(int(at_s * RATE_HZ), int((at_s + 0.05) * RATE_HZ))
        return 20 * np.log10(np.abs(heard[piece]).max() / np.abs(audio[piece]).max())

    assert gain_db(0.5) == pytest.approx(-6.0, abs=0.1)
    assert gain_db(3.0) - gain_db(2.0) == pytest.approx(20.0, abs=0.2)
    assert gain_db(5.9) == pytest.approx(74.0, abs=0.2)  # -80 dB brought to -6
    faint = levelled(1e-6 * np.cos(2 * np.pi * 1_000.0 * t))
    assert 20 * np.log10(np.abs(faint[-6_000:]).max() / 1e-6) == pytest.approx(80.0, abs=0.1)


@pytest.mark.parametrize("gain_db", [-20.0, 0.0, 13.0])
def test_a_fixed_gain_is_exact(gain_db):
    audio = noise_message(6_000, RATE_HZ, 100.0, 4_000.0, 51)
    expected = audio.astype(np.float32) * np.float32(10 ** (gain_db / 20))
    np.testing.assert_array_equal(levelled(audio, np.array([gain_db])), expected)


CONVERTED_DB = -75.0  # windowed sinc, 90 dB down, and its phases interpolated


@pytest.mark.parametrize("rate_hz", [12_001.1321, 12_345.67, 12_500.0, 13_230.0, 23_999.0])
@pytest.mark.parametrize("tone_hz", [300.0, 2_700.0, 4_500.0])
def test_rate_conversion_is_the_same_tone_at_the_same_instants(rate_hz, tone_hz):
    n = int(2 * rate_hz)
    out_hz = 12_000.0
    audio = np.cos(2 * np.pi * tone_hz * np.arange(n) / rate_hz + 0.3).astype(np.float32)
    heard = through(RateConverter(1, 1, rate_hz, out_hz), audio[None, None])[0, 0]
    assert len(heard) == int(np.ceil(n * out_hz / rate_hz))
    expected = np.cos(2 * np.pi * tone_hz * np.arange(len(heard)) / out_hz + 0.3)
    error = (heard - expected)[200:-200]
    assert 10 * np.log10(np.mean(error**2) / 0.5) < CONVERTED_DB


def test_rate_conversion_folds_nothing_into_the_message():
    """What lies over half the new rate, and is no neighbour of it, is gone."""
    rate_hz = 23_999.0
    t = np.arange(int(rate_hz)) / rate_hz
    for tone_hz in (7_500.0, 9_000.0, 11_500.0):
        audio = np.cos(2 * np.pi * tone_hz * t).astype(np.float32)
        heard = through(RateConverter(1, 1, rate_hz, 12_000.0), audio[None, None])[0, 0, 200:-200]
        assert 10 * np.log10(np.mean(heard**2) / 0.5) < CONVERTED_DB


def test_a_gate_opens_and_shuts_with_ramps_of_10_ms_that_mirror_each_other():
    step = 256
    gate = Gate(1, 1, step, RATE_HZ, np.array([False]))
    steps = np.array([[False, True, True, False, False]])
    gain = gate.process(np.ones((1, 1, 5 * step), np.float32), steps)[0, 0]
    ramp = round(0.01 * RATE_HZ)
    assert not gain[:step].any()
    np.testing.assert_array_equal(gain[step + ramp : 3 * step], 1.0)
    assert not gain[3 * step + ramp :].any()
    np.testing.assert_allclose(gain[step : step + ramp] + gain[3 * step : 3 * step + ramp], 1.0, atol=ROUNDING)
    assert np.abs(np.diff(gain)).max() < 1.1 * np.pi / 2 / ramp  # a raised cosine's steepest step: no click


NOISE_S = 60


@pytest.mark.parametrize("step_db", [0.0, 6.0, 20.0])
@pytest.mark.parametrize("band_hz", [((-2_700.0, 2_700.0),), ((300.0, 2_700.0),), ((-4_500.0, 4_500.0),)])
def test_a_squelch_stays_shut_in_noise_whatever_its_level(band_hz, step_db):
    """A step of the noise moves neither statistic, it says; designed for 0.3 openings an hour. Twenty channels, a minute,
    a step every 5 s.
    """
    rng = np.random.default_rng(61)
    channels = 20
    squelch = Squelch([band_hz] * channels, RATE_HZ, 5_000.0, np.full(channels, np.nan))
    openings = 0
    before = np.zeros((channels, 1), bool)
    for second in range(NOISE_S):
        level = 0.1 * 10 ** (-step_db / 20 * (second // 5 % 2))
        shape = channels, int(RATE_HZ)
        noise = level * (rng.standard_normal(shape, np.float32) + 1j * rng.standard_normal(shape, np.float32))
        steps = np.concatenate([before, squelch.process(noise.astype(np.complex64))], axis=1)
        openings += int(np.sum(steps[:, 1:] & ~steps[:, :-1]))
        before = steps[:, -1:]
    assert openings <= 1


@pytest.mark.parametrize(
    ("threshold_db", "snr_db", "is_open"), [(10, 13, True), (10, 7, False), (3, 6, True), (3, 0, False)]
)
def test_a_set_threshold_is_the_snr_that_opens(threshold_db, snr_db, is_open):
    """SNR in the emission's own band; three decibels to either side are clear of the estimate's spread."""
    rng = np.random.default_rng(71)
    n = 60_000
    noise = rng.standard_normal(n) + 1j * rng.standard_normal(n)  # power 2, flat over the rate
    message = noise_message(n, RATE_HZ, 300.0, 2_700.0, 72) + 1j * noise_message(n, RATE_HZ, 300.0, 2_700.0, 73)
    spectrum = np.fft.fft(message)
    spectrum[np.fft.fftfreq(n) < 0] = 0
    message = np.fft.ifft(spectrum)
    in_band = 2 * 2_400.0 / RATE_HZ
    message *= np.sqrt(in_band * 10 ** (snr_db / 10) / np.mean(np.abs(message) ** 2))
    squelch = Squelch([((300.0, 2_700.0),)], RATE_HZ, 5_000.0, np.array([float(threshold_db)]))
    steps = squelch.process(0.01 * (noise + message).astype(np.complex64)[None])[0]
    assert steps[10:].mean() > 0.99 if is_open else steps.mean() < 0.05


OPENS_S = 0.11  # wanted of speech at 6 dB


def test_speech_at_6_db_opens_soon(shared_recordings):
    """From the first sound of a voice; 6 dB is its mean power over the noise in its band while it speaks."""
    import soundfile
    from scipy.signal import hilbert, resample_poly

    voice, rate_hz = soundfile.read(shared_recordings / "speech" / "woman-30s-8k.wav")
    voice = resample_poly(voice, 3, 2)
    spectrum = np.fft.fft(hilbert(voice))
    frequency_hz = np.fft.fftfreq(len(voice), 1 / RATE_HZ)
    sideband = np.fft.ifft(np.where((frequency_hz >= 300) & (frequency_hz <= 2_700), spectrum, 0))
    power = np.convolve(np.abs(sideband) ** 2, np.ones(240) / 240, "same")
    speaking = power > 0.05 * np.quantile(power, 0.99)
    starts = [
        k for k in np.flatnonzero(np.diff(speaking.astype(int)) == 1) if not speaking[max(0, k - 6_000) : k].any()
    ]
    assert rate_hz == 8_000
    assert len(starts) >= 5
    rng = np.random.default_rng(8)
    scale = np.sqrt(
        2_400.0 / RATE_HZ * 10**0.6 / np.mean(np.abs(sideband[speaking]) ** 2)
    )  # the noise has a power of 1
    delays_s = []
    for start in starts:
        n = 24_000
        piece = sideband[start : start + n].copy()
        noise = (rng.standard_normal(6_000 + n) + 1j * rng.standard_normal(6_000 + n)) / np.sqrt(2.0)
        noise[6_000 : 6_000 + len(piece)] += piece * scale
        squelch = Squelch([((300.0, 2_700.0),)], RATE_HZ, 5_000.0, AUTOMATIC)
        steps = squelch.process(noise.astype(np.complex64)[None])[0]
        opened = np.flatnonzero(steps)
        delays_s.append((opened[0] + 1) * squelch.step_samples / RATE_HZ - 0.5 if len(opened) else np.inf)
    assert np.median(delays_s) < OPENS_S
