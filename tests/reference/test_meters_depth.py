"""Depth of modulation and power efficiency against closed forms and against messages whose peaks are known."""

import numpy as np
import pytest
from known_channels import CHUNK_HOPS, known, noise, tone, values, voices

from rxchain.synthesis.modulation import Modulation

SECONDS, CHANNELS, SEED = 8.0, 4, 3


def at_cn_db(cn_db: float) -> float:
    """Density under the carrier for a carrier-to-noise ratio in 9 kHz."""
    return -cn_db - 10 * np.log10(9_000.0)


@pytest.mark.parametrize(
    ("depth", "share_percent"),
    [(0.1, 0.498), (0.3, 4.306), (0.5, 11.111), (0.8, 24.242), (0.85, 26.538), (1.0, 33.333)],
)
def test_tones_read_their_depth_and_their_share_of_the_power(depth, share_percent):
    """mu, and mu^2 / (2 + mu^2): check values 5.1, computed (S. Haykin, Communication Systems, ch. 2)."""
    group = known("A3E", tone, SECONDS, CHANNELS, SEED, noise_density_db=at_cn_db(40.0), how=Modulation(depth))
    figures = group.figures()
    for name in ("depth_percent", "depth_positive_percent", "depth_negative_percent"):
        assert values(figures, name)[0] == pytest.approx(100 * depth, abs=0.15)
    assert values(figures, "power_efficiency_percent")[0] == pytest.approx(share_percent, abs=0.1)


@pytest.mark.parametrize("cn_db", [30.0, 20.0, 15.0])
def test_tones_are_read_through_noise(cn_db):
    """Tones stay within 2 points at 15 dB, where plain peaks read 40 too high."""
    group = known("A3E", tone, SECONDS, CHANNELS, SEED, noise_density_db=at_cn_db(cn_db))
    value, deviation = values(group.figures(), "depth_percent")
    assert np.abs(value - 80.0).max() < {30.0: 0.2, 20.0: 0.5, 15.0: 1.0}[cn_db]
    assert np.all(deviation < 0.5)


def test_over_modulation_is_read_beyond_a_hundred_percent():
    """1 + 1.3 cos: the carrier's phase turns where the envelope folds, and the coherent envelope falls to -0.3."""
    group = known("A3E", tone, SECONDS, CHANNELS, SEED, noise_density_db=at_cn_db(30.0), how=Modulation(1.3))
    assert values(group.figures(), "depth_negative_percent")[0] == pytest.approx(130.0, abs=0.5)


def test_rise_and_fall_of_a_lopsided_programme_are_told_apart():
    """+125 % and -90 %: a cosine and its second harmonic in phase, 0.9/... peaks of a cos x + b cos 2x."""
    first, second = 1.075, 0.175  # rise a + b = 1.25, fall a - b = 0.90 (b < a / 4: no dip between)

    def lopsided(n, rate_hz, band_hz, rng):
        at = 2 * np.pi * 4_000 * np.arange(n) / n + rng.uniform(0, 6)
        return (first * np.cos(at) + second * np.cos(2 * at)) / 1.25

    group = known("A3E", lopsided, SECONDS, CHANNELS, SEED, noise_density_db=at_cn_db(40.0), how=Modulation(1.25))
    figures = group.figures()
    assert values(figures, "depth_positive_percent")[0] == pytest.approx(125.0, abs=0.5)
    assert values(figures, "depth_negative_percent")[0] == pytest.approx(90.0, abs=0.5)
    assert values(figures, "depth_percent")[0] == pytest.approx(107.5, abs=0.5)


@pytest.mark.parametrize(("cn_db", "rms_points"), [(40.0, 1.2), (30.0, 2.2), (20.0, 6.0)])
def test_noise_messages_within_their_stated_deviations(cn_db, rms_points):
    """A peak is one short event: no smoother brings it back whole, and the deviation has to say so."""
    error, deviation = [], []
    for depth in (0.8, 1.3):
        group = known("A3E", noise, SECONDS, 8, SEED, noise_density_db=at_cn_db(cn_db), how=Modulation(depth))
        value, stated = values(group.figures(), "depth_percent")
        error.append(value - (group.rise_percent + group.fall_percent) / 2)
        deviation.append(stated)
    score = np.abs(np.concatenate(error)) / np.concatenate(deviation)
    assert np.sqrt(np.mean(np.square(error))) < rms_points
    assert np.mean(score < 1) >= 0.5
    assert np.mean(score < 2) >= 0.9


def test_voices_at_30_db(shared_recordings):
    """Half the peak-to-peak of ten seconds of voice; measured: 1.2 points rms, 81 % covered."""
    group = known("A3E", voices(shared_recordings), 10.0, 12, SEED, noise_density_db=at_cn_db(30.0))
    value, deviation = values(group.figures(), "depth_percent")
    error = value - (group.rise_percent + group.fall_percent) / 2
    assert np.sqrt(np.mean(error**2)) < 1.8
    assert np.mean(np.abs(error) < deviation) >= 0.5
    assert np.mean(np.abs(error) < 2 * deviation) >= 0.9


def test_an_unmodulated_carrier_has_a_depth_of_nothing():
    group = known("A3E", lambda n, *_: np.full(n, 1e-12), SECONDS, CHANNELS, SEED, noise_density_db=at_cn_db(40.0))
    value, deviation = values(group.figures(), "depth_percent")
    assert np.all(value < 3 * deviation)
    assert np.all(value < 3.0)


def test_a_keyed_carrier_has_finite_sane_figures():
    """A time signal: the carrier falls to 15 % for a tenth of every second and is never lost (DCF77, PTB)."""
    group = known("A3E", lambda n, *_: np.full(n, 1e-12), 10.0, 2, SEED, noise_density_db=-60.0)
    iq = group.turned.iq
    iq *= np.where((np.arange(iq.shape[1]) / group.rate_hz) % 1.0 < 0.1, 0.15, 1.0)
    for figures in group.figures():
        readings = {name: reading for name, reading in figures.as_json().items() if reading is not None}
        assert {"depth_percent", "carrier_offset_hz", "level_dbfs", "carrier_to_noise_density_dbhz"} <= set(readings)
        assert all(np.isfinite(one["value"]) and one["uncertainty"] > 0 for one in readings.values())
        assert 0.0 <= figures.depth_percent.value < 200.0
        assert 0.0 <= figures.power_efficiency_percent.value <= 100.0


def test_peaks_at_the_seams_of_chunks_are_not_missed():
    """One short pulse, put everywhere about a seam: it is read the same wherever it falls."""
    readings = []
    for place in range(-4, 5):

        def pulse(n, rate_hz, band_hz, rng, place=place):
            at = 10 * CHUNK_HOPS * 64 + place * 48
            spectrum = np.fft.rfft(np.eye(1, n, at)[0])
            frequency_hz = np.fft.rfftfreq(n, 1 / rate_hz)
            spectrum[(frequency_hz < band_hz[0]) | (frequency_hz > 3_000.0)] = 0
            made = np.fft.irfft(spectrum, n)
            return made / made.max()

        group = known("A3E", pulse, 5.0, 1, SEED, noise_density_db=at_cn_db(60.0))
        readings.append(group.figures()[0].depth_positive_percent.value)
    assert np.array(readings) == pytest.approx(80.0, abs=1.0)
