"""Synthesis against closed forms: the truth that all else is measured by."""

from dataclasses import replace

import numpy as np
import pytest
from scenes import one_of_each, station
from signals import hilbert, noise_message

from rxchain.emissions import EMISSIONS
from rxchain.synthesis.capture import quantised, write_capture
from rxchain.synthesis.messages import Message, make_message
from rxchain.synthesis.modulation import Modulation, modulate
from rxchain.synthesis.propagation import F1487, Fading, faded, path_gains
from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Impulses, Scene

RATE_HZ = 24_000.0
N = 48_000
T = np.arange(N) / RATE_HZ


@pytest.mark.parametrize(
    ("name", "below_db"), [("H3E-USB", 3.0), ("H3E-LSB", 6.0), ("R3E-USB", 18.0), ("R3E-LSB", 16.0)]
)
def test_carrier_below_peak_envelope_power(name, below_db):
    """H3E 3 to 6 dB, R3E 18 or 16 +- 2 dB below peak envelope power (47 CFR 80.207(c)); amplitudes from check values 2:
    with the peak at 1 the carrier is 10^(-L/20) and the sideband the rest.
    """
    message = np.cos(2 * np.pi * 1_000.0 * T)
    envelope = modulate(EMISSIONS[name], message[None], RATE_HZ, Modulation(carrier_db=below_db)).envelope
    assert np.abs(envelope).max() == pytest.approx(1.0, abs=1e-9)
    spectrum = np.fft.fft(envelope) / N
    assert 20 * np.log10(abs(spectrum[0])) == pytest.approx(-below_db, abs=1e-6)
    place = round(1_000.0 * N / RATE_HZ) * (1 if name.endswith("USB") else -1)
    assert abs(spectrum[place]) == pytest.approx(1 - 10 ** (-below_db / 20), abs=1e-9)


def test_unwanted_sideband_is_nil():
    message = noise_message(N, RATE_HZ, 300.0, 2_700.0, 1)
    spectrum = np.abs(np.fft.fft(modulate(EMISSIONS["J3E-USB"], message[None], RATE_HZ, Modulation()).envelope)) ** 2
    negative = np.fft.fftfreq(N) < 0
    assert 10 * np.log10(spectrum[negative].sum() / spectrum.sum()) < -100.0


def test_independent_sidebands_carry_one_message_each():
    first, second = (noise_message(N, RATE_HZ, 300.0, 2_700.0, seed) for seed in (2, 3))
    made = modulate(EMISSIONS["B8E"], np.stack([first, second]), RATE_HZ, Modulation())
    upper = made.messages[0] + 1j * hilbert(made.messages[0])
    lower = np.conj(made.messages[1] + 1j * hilbert(made.messages[1]))
    np.testing.assert_allclose(made.envelope, upper + lower, atol=1e-9)


def test_stereo_envelope_and_pilot():
    """Envelope 1 + L + R whatever the phase; a 25 Hz pilot of 0.05 rad (47 CFR 73.128(c)(7), from memory)."""
    left = 0.5 * np.cos(2 * np.pi * 400.0 * T)
    made = modulate(EMISSIONS["AM-STEREO"], np.stack([left, np.zeros(N)]), RATE_HZ, Modulation(depth=0.8))
    total = 1 + made.messages.sum(axis=0)
    np.testing.assert_allclose(np.abs(made.envelope), total, rtol=1e-12)
    silent = modulate(EMISSIONS["AM-STEREO"], np.zeros((2, N)), RATE_HZ, Modulation(depth=0.8)).envelope
    assert np.abs(np.angle(silent)).max() == pytest.approx(0.05, abs=1e-4)
    assert np.argmax(np.abs(np.fft.rfft(np.angle(silent)))) * RATE_HZ / N == pytest.approx(25.0)


def test_keyed_text_has_the_speed_of_the_standard_word():
    """PARIS and its word gap are 50 dots (Recommendation ITU-R M.1677-1 code; the word is common practice): at 20 words a
    minute a dot lasts 60 ms, and 22 of the 50 are key down.
    """
    keyed = make_message(
        Message("morse", text="PARIS", words_per_minute=20.0), round(3.0 * RATE_HZ), RATE_HZ, (0, 0), 1
    )
    assert keyed.mean() == pytest.approx(22 / 50, abs=0.005)
    assert np.sum(np.diff((keyed > 0.5).astype(int)) == 1) == 14 - 1  # of its 14 marks the first is on at once


def test_noise_density_and_level():
    scene = Scene(48_000.0, 1e6, 4.0, (), noise_dbfs_hz=-70.0)
    iq = render(scene).iq
    assert 10 * np.log10(np.mean(np.abs(iq) ** 2) / 48_000.0) == pytest.approx(-70.0, abs=0.05)
    one = replace(station("A3E", 1.002e6), level_dbfs=-12.0, messages=(Message("silence"),))
    iq = render(Scene(48_000.0, 1e6, 1.0, (one,))).iq
    assert 10 * np.log10(np.mean(np.abs(iq.astype(complex)) ** 2)) == pytest.approx(-12.0, abs=1e-3)


def test_offset_drift_and_times():
    one = replace(
        station("A3E", 1.002e6), messages=(Message("silence"),), offset_hz=3.0, drift_hz_s=2.0, start_s=0.5, stop_s=1.5
    )
    rendered = render(Scene(48_000.0, 1e6, 2.0, (one,)))
    iq = rendered.iq.astype(complex)
    assert np.abs(iq[:23_000]).max() < 1e-6
    assert np.abs(iq[73_000:]).max() < 1e-6
    turns = np.unwrap(np.angle(iq[30_000:66_000])) / (2 * np.pi)
    frequency_hz = np.gradient(turns) * 48_000.0
    expected_hz = 2_003.0 + 2.0 * np.arange(30_000, 66_000) / 48_000.0
    np.testing.assert_allclose(frequency_hz, expected_hz, atol=0.5)
    assert rendered.truths[0].carrier_offset_hz == pytest.approx(3.0 + 2.0 * 1.0)
    assert (rendered.truths[0].start_sample, rendered.truths[0].stop_sample) == (24_000, 72_000)


def test_the_same_seed_gives_the_same_capture_and_others_do_not_change_it():
    stations = tuple(one_of_each())
    scene = Scene(288_000.0, 1e6, 0.2, stations, seed=5, noise_dbfs_hz=-100.0)
    np.testing.assert_array_equal(render(scene).iq, render(scene).iq)
    assert not np.array_equal(render(scene).iq, render(replace(scene, seed=6)).iq)
    fewer = render(replace(scene, stations=stations[:3])).truths[1]
    np.testing.assert_array_equal(fewer.messages, render(scene).truths[1].messages)


def test_impulses_come_as_often_and_last_as_long_as_asked():
    scene = Scene(48_000.0, 1e6, 20.0, (), impulses=(Impulses(50.0, 1e-3, 0.0),))
    on = np.abs(render(scene).iq) > 0.5
    assert np.mean(on) == pytest.approx(50.0 * 1e-3, rel=0.1)


RAYLEIGH_TOLERANCE = 0.1  # a thousand seconds hold some 300 crossings


def test_watterson_path_has_its_doppler_spread():
    """0.5 Hz spread: correlation falls to 1/e in 0.90 s, 0.326 crossings of the rms level a second (Rice); check values 7,
    computed from the Fourier pair; spread = 2 sigma of the power spectrum (ITU-R F.1487).
    """
    rate_hz = 50.0
    gains = path_gains(Fading(1, 0.0, 0.5), round(3_000 * rate_hz), rate_hz, seed=4)[0]
    power = np.abs(np.fft.fft(gains)) ** 2
    correlation = np.fft.ifft(power).real
    correlation /= correlation[0]
    assert np.argmax(correlation < np.exp(-1)) / rate_hz == pytest.approx(0.90, rel=RAYLEIGH_TOLERANCE)
    level = np.abs(gains) / np.sqrt(np.mean(np.abs(gains) ** 2))
    assert np.sum((level[:-1] < 1) & (level[1:] >= 1)) / 3_000 == pytest.approx(0.326, rel=RAYLEIGH_TOLERANCE)
    frequency_hz = np.fft.fftfreq(len(gains), 1 / rate_hz)
    assert 2 * np.sqrt(np.average(frequency_hz**2, weights=power)) == pytest.approx(0.5, rel=RAYLEIGH_TOLERANCE)


def test_watterson_paths_are_equal_independent_and_delayed():
    gains = path_gains(Fading(2, 1e-3, 1.0), 100_000, 50.0, seed=6)
    power = np.mean(np.abs(gains) ** 2, axis=1)
    np.testing.assert_allclose(power, 0.5, rtol=0.1)
    assert abs(np.mean(gains[0] * np.conj(gains[1]))) < 0.05
    pulse = np.zeros(4_800, complex)
    pulse[2_400] = 1.0
    after = np.abs(faded(pulse, Fading(2, 2e-3, 0.1), 48_000.0, seed=1))
    assert set(np.flatnonzero(after > 0.05 * after.max())) == {2_400, 2_400 + 96}


def test_the_ten_conditions_of_f1487():
    """Delays in ms and spreads in Hz of Recommendation ITU-R F.1487, as check values 7 list them."""
    listed = {(0.5, 0.5), (2, 1.5), (6, 10), (0.5, 0.1), (1, 0.5), (2, 1), (7, 1), (3, 10), (7, 30)}
    assert len(F1487) == 10
    assert {(1e3 * delay_s, spread_hz) for delay_s, spread_hz in F1487.values()} == listed


@pytest.mark.parametrize(
    ("name", "step"), [("ci16_le", 1 / 32_768), ("ci8", 1 / 128), ("cu8", 1 / 127.5), ("cf32_le", 0.0)]
)
def test_formats_round_to_their_step_and_count_what_they_clip(rng, name, step):
    from rxchain.sources.sample_formats import BY_SIGMF_NAME

    iq = (0.3 * (rng.standard_normal(5_000) + 1j * rng.standard_normal(5_000))).astype(np.complex64)
    inside = (np.abs(iq.real) < 0.99) & (np.abs(iq.imag) < 0.99)
    values, clipped = quantised(iq, name)
    back, over = BY_SIGMF_NAME[name].decode(values)
    assert np.max(np.abs((back - iq)[inside])) <= step * np.sqrt(0.5) + 1e-7
    assert clipped == (0 if name == "cf32_le" else pytest.approx(np.sum(~inside), abs=12))
    assert over >= clipped


def test_a_written_capture_comes_back_with_its_truth(tmp_path):
    from rxchain.sources.opening import open_source

    scene = Scene(48_000.0, 1e6, 0.5, (station("A3E", 1.001e6),), format="ci16_le", noise_dbfs_hz=-90.0)
    rendered = render(scene)
    meta_path, clipped = write_capture(scene, rendered, tmp_path / "deep" / "capture")
    assert clipped == 0
    source = open_source(str(meta_path))
    iq = np.concatenate([block.iq for block in source.blocks()])
    assert np.max(np.abs(iq - rendered.iq)) < 1.0 / 32_768
    assert (source.info.sample_rate_hz, source.info.centre_hz) == (48_000.0, 1e6)
