"""Detectors against closed forms and published figures; each test names where its figures come from."""

import numpy as np
import pytest
from signals import distortion_percent, fit, hilbert, noise_message, through, tone_lines

from rxchain.detectors import vestigial
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.envelope import RECTIFIER_GAIN, EnvelopeDetector, emission_band
from rxchain.detectors.sidebands import both_sidebands, one_sideband, quarter_turned
from rxchain.detectors.stereo import left_and_right_taps, sum_and_difference
from rxchain.emissions import EMISSIONS, Side
from rxchain.kernels.fir import lowpass
from rxchain.synthesis.modulation import Modulation, modulate

RATE_HZ = 12_000.0
N = 24_000
T = np.arange(N) / RATE_HZ
STEADY = slice(2_000, N - 2_000)
LOW_HZ, HIGH_HZ = 100.0, 4_500.0
BAND = both_sidebands(LOW_HZ, HIGH_HZ, RATE_HZ)
WITH_MEAN = lowpass(301, 4_700.0, RATE_HZ, 80.0).astype(complex)  # a message filter that lets the carrier through


def coherent(taps, iq):
    return through(CoherentDetector(np.atleast_2d(taps)[None], 1), iq.astype(np.complex64)[None])[0]


def envelope(iq, low_hz=-HIGH_HZ, high_hz=HIGH_HZ, audio=BAND, oversampling=4):
    detector = EnvelopeDetector([emission_band(low_hz, high_hz, RATE_HZ)], [audio], oversampling)
    return through(detector, iq.astype(np.complex64)[None])[0, 0]


@pytest.mark.parametrize(
    ("depth", "share_percent", "sideband_db", "total_db", "peak_db"),
    [
        (0.1, 0.498, -26.02, 0.022, 0.83), (0.3, 4.306, -16.48, 0.191, 2.28), (0.5, 11.111, -12.04, 0.512, 3.52),
        (0.7, 19.679, -9.12, 0.952, 4.61), (0.8, 24.242, -7.96, 1.206, 5.11), (0.85, 26.538, -7.43, 1.339, 5.34),
        (0.9, 28.826, -6.94, 1.477, 5.58), (1.0, 33.333, -6.02, 1.761, 6.02),
    ],
)  # fmt: skip
def test_power_and_levels_of_tone_modulation(depth, share_percent, sideband_db, total_db, peak_db):
    """Sideband share mu^2 / (2 + mu^2), each sideband mu / 2 of the carrier, all 1 + mu^2 / 2, peak (1 + mu)^2: check
    values 5.1, computed (S. Haykin, Communication Systems, ch. 2). Measured on what the receiver's filters let through.
    """
    message = np.cos(2 * np.pi * 1_000.0 * T)
    iq = modulate(EMISSIONS["A3E"], message[None], RATE_HZ, Modulation(depth=depth)).envelope
    upper = coherent(one_sideband(Side.UPPER, LOW_HZ, HIGH_HZ, RATE_HZ), iq)[0, STEADY]
    heard = coherent(BAND, iq)[0, STEADY]
    # The real part of one sideband has half its power; both sidebands fold onto one message.
    one_side = 2 * np.mean(upper**2)
    assert 10 * np.log10(one_side) == pytest.approx(sideband_db, abs=0.05)
    assert 100 * 2 * one_side / (1 + 2 * one_side) == pytest.approx(share_percent, abs=0.01 * share_percent)
    assert np.sqrt(2 * np.mean(heard**2)) == pytest.approx(depth, rel=1e-3)
    with_carrier = coherent(WITH_MEAN, iq)[0, STEADY]
    assert 10 * np.log10(np.mean(with_carrier**2)) == pytest.approx(total_db, abs=0.01)
    assert 20 * np.log10(with_carrier.max()) == pytest.approx(peak_db, abs=0.01)


@pytest.mark.parametrize(("depths", "share_percent"), [((0.5, 0.5), 20.0), ((0.3, 0.4), 11.11)])
def test_depths_of_several_tones_add_as_powers(depths, share_percent):
    """For power, mu^2 is the sum of the tones' mu^2; for the peak the mus themselves add: check values 5.1, computed."""
    tones = sum(depth * np.cos(2 * np.pi * f * T) for depth, f in zip(depths, (700.0, 1_100.0), strict=True))
    heard = coherent(BAND, 1 + tones)[0, STEADY]
    sidebands = np.mean(heard**2)
    assert 100 * sidebands / (1 + sidebands) == pytest.approx(share_percent, abs=0.02)
    assert heard.max() == pytest.approx(sum(depths), rel=2e-3)  # tones that meet at their tops


@pytest.mark.parametrize(("depth", "percent"), [(1.1, 5.85), (1.2, 11.99), (1.25, 14.93), (1.5, 28.4), (2.0, 51.4)])
def test_over_modulation_folds_the_envelope_and_not_the_coherent_detector(depth, percent):
    """THD of |1 + mu cos|: check values 5.1, computed. Harmonics beyond the audio band are left out of neither side:
    the tone is low enough for all that count.
    """
    iq = 1 + depth * np.cos(2 * np.pi * 200.0 * T)
    lines = tone_lines(envelope(iq)[STEADY], RATE_HZ, 200.0, orders=20)
    assert distortion_percent(lines) == pytest.approx(percent, abs=0.25)  # harmonics from the 23rd up are cut off
    clean = tone_lines(coherent(BAND, iq)[0, STEADY], RATE_HZ, 200.0)
    assert distortion_percent(clean) < 0.01


def test_suppressed_carrier_into_an_envelope_detector():
    """|cos|: mean 2/pi, second harmonic 4/(3 pi), fourth 4/(15 pi), none at the tone: check values 5.1, Fourier series
    of |cos|. The magnitude's harmonics never end, so some fold back at any rate; less at a higher one.
    """
    iq = np.cos(2 * np.pi * 600.0 * T)
    lines = tone_lines(envelope(iq, audio=WITH_MEAN, oversampling=16)[STEADY], RATE_HZ, 600.0)
    assert lines[0] == pytest.approx(2 / np.pi, abs=1e-3)
    assert lines[1] < 1e-3
    assert lines[2] == pytest.approx(0.4244, abs=1e-3)
    assert lines[4] == pytest.approx(0.0849, abs=1e-3)


@pytest.mark.parametrize(
    ("k", "carrier_db", "second_percent", "third_percent", "thd_percent", "fundamental"),
    [(0.05, -0.42, 1.25, 0.03, 1.25, 0.0500), (0.1, -0.83, 2.5, 0.13, 2.5, 0.0999), (0.2, -1.58, 4.98, 0.5, 5.0, 0.1990),
     (0.3, -2.28, 7.41, 1.11, 7.5, 0.2966), (0.4125, -3.0, 10.08, 2.05, 10.3, 0.4035),
     (0.5, -3.52, 12.08, 2.97, 12.47, 0.4838), (0.7, -4.61, 16.22, 5.45, 17.32, 0.6540),
     (0.8, -5.11, 17.96, 6.75, 19.58, 0.7294), (1.0, -6.02, 20.0, 8.57, 22.73, 0.8488)],
)  # fmt: skip
def test_full_carrier_single_sideband_in_an_envelope_detector(
    k, carrier_db, second_percent, third_percent, thd_percent, fundamental
):
    """|1 + k exp(j theta)|: check values 5.3, computed. A coherent detector has none of it. The signal is the
    transmitter's own, its carrier so far below peak envelope power.
    """
    below_peak_db = 20 * np.log10(1 + k)
    assert -below_peak_db == pytest.approx(carrier_db, abs=0.01)
    message = np.cos(2 * np.pi * 300.0 * T)
    sent = modulate(EMISSIONS["H3E-USB"], message[None], RATE_HZ, Modulation(carrier_db=below_peak_db)).envelope
    iq = sent * (1 + k)  # from the peak envelope to the carrier as unit
    lines = tone_lines(envelope(iq, -50.0, audio=WITH_MEAN)[STEADY], RATE_HZ, 300.0, orders=14)
    assert 100 * lines[2] / lines[1] == pytest.approx(second_percent, abs=0.03)
    assert 100 * lines[3] / lines[1] == pytest.approx(third_percent, abs=0.03)
    assert distortion_percent(lines) == pytest.approx(thd_percent, abs=0.08)  # harmonics over 4.2 kHz are cut off
    assert lines[1] == pytest.approx(fundamental, abs=2e-4)
    if k == 1.0:
        assert lines[0] == pytest.approx(4 / np.pi, abs=1e-3)
    product = coherent(one_sideband(Side.UPPER, LOW_HZ, HIGH_HZ, RATE_HZ), iq)[0, STEADY]
    assert distortion_percent(tone_lines(product, RATE_HZ, 300.0)) < 0.01


@pytest.mark.parametrize(
    ("degrees", "loss_db", "crosstalk_db"),
    [(0.5, 0.0003, -41.18), (1, 0.0013, -35.16), (2, 0.0053, -29.14), (5, 0.033, -21.16), (10, 0.133, -15.07),
     (30, 1.249, -4.77), (45, 3.010, 0.0), (60, 6.021, 4.77)],
)  # fmt: skip
def test_phase_error_costs_a_cosine_and_leaks_a_tangent(degrees, loss_db, crosstalk_db):
    """Wanted cos(phi), crosstalk tan(phi): check values 5.4, computed."""
    first = noise_message(N, RATE_HZ, LOW_HZ, HIGH_HZ, 1)
    second = noise_message(N, RATE_HZ, LOW_HZ, HIGH_HZ, 2)
    iq = (first + 1j * second) * np.exp(1j * np.radians(degrees))
    in_phase = coherent(np.stack([BAND, quarter_turned(BAND)]), iq)[0, STEADY]
    (wanted, leaked), _ = fit(in_phase, first[STEADY], second[STEADY])
    assert -20 * np.log10(abs(wanted)) == pytest.approx(loss_db, abs=2e-3)
    assert 20 * np.log10(abs(leaked / wanted)) == pytest.approx(crosstalk_db, abs=0.05)
    in_quadrature = coherent(np.stack([BAND, quarter_turned(BAND)]), iq)[1, STEADY]
    (leaked, wanted), _ = fit(in_quadrature, first[STEADY], second[STEADY])
    assert -20 * np.log10(abs(wanted)) == pytest.approx(loss_db, abs=2e-3)
    assert 20 * np.log10(abs(leaked / wanted)) == pytest.approx(crosstalk_db, abs=0.05)


def test_a_quarter_turn_loses_double_sideband_altogether():
    """cos(90 degrees) = 0: check values 5.4."""
    message = noise_message(N, RATE_HZ, LOW_HZ, HIGH_HZ, 1)
    heard = coherent(BAND, 1j * message)[0, STEADY]
    assert np.std(heard) < 1e-5 * np.std(message)


OFF_HZ = 20.0


def test_frequency_error_beats_in_double_sideband():
    """m(t) cos(2 pi df t): fades to nothing 2 df times a second: check values 5.4, textbooks."""
    message = np.cos(2 * np.pi * 1_000.0 * T)
    heard = coherent(BAND, message * np.exp(2j * np.pi * OFF_HZ * T))[0]
    expected = message * np.cos(2 * np.pi * OFF_HZ * T)
    (gain,), left_db = fit(heard[STEADY], expected[STEADY])
    assert gain == pytest.approx(1.0, abs=1e-3)
    assert left_db < -60.0
    nulls = 0.25 / OFF_HZ + np.arange(20, 50) * 0.5 / OFF_HZ  # 2 df of them a second
    assert np.abs(heard[np.round(nulls * RATE_HZ).astype(int)]).max() < 1e-2


@pytest.mark.parametrize(("side", "heard_hz"), [(Side.UPPER, 1_000.0 + OFF_HZ), (Side.LOWER, 1_000.0 - OFF_HZ)])
def test_frequency_error_shifts_single_sideband_by_as_much(side, heard_hz):
    """Every component by exactly df: check values 5.4, textbooks."""
    iq = np.exp(2j * np.pi * (int(side) * 1_000.0 + OFF_HZ) * T)
    lines = tone_lines(coherent(one_sideband(side, 300.0, 2_700.0, RATE_HZ), iq)[0, STEADY], RATE_HZ, heard_hz, 1)
    assert lines[1] == pytest.approx(1.0, abs=1e-3)


def test_frequency_error_is_nothing_to_an_envelope():
    """The magnitude has no phase: check values 5.4."""
    iq = (1 + 0.8 * np.cos(2 * np.pi * 1_000.0 * T)) * np.exp(2j * np.pi * OFF_HZ * T)
    lines = tone_lines(envelope(iq)[STEADY], RATE_HZ, 1_000.0)
    assert lines[1] == pytest.approx(0.8, abs=1e-3)
    assert distortion_percent(lines) < 0.02


def test_phase_error_leaves_single_sideband_its_level():
    """m cos(phi) - m^ sin(phi): a tone's amplitude is the same at any phase: check values 5.4, textbooks."""
    taps = one_sideband(Side.UPPER, 300.0, 2_700.0, RATE_HZ)
    for degrees in (0, 40, 90, 200):
        iq = 0.5 * np.exp(2j * np.pi * 1_100.0 * T + 1j * np.radians(degrees))
        assert tone_lines(coherent(taps, iq)[0, STEADY], RATE_HZ, 1_100.0)[1] == pytest.approx(0.5, rel=1e-3)


def test_frequency_error_shifts_single_sideband_and_beats_double_sideband():
    """Single sideband: every component shifted by exactly the error; suppressed-carrier double sideband: m cos(2 pi df t);
    the envelope of full-carrier double sideband: nothing. Check values 5.4, textbooks.
    """
    error_hz = 25.0
    turn = np.exp(2j * np.pi * error_hz * T)
    single = coherent(one_sideband(Side.UPPER, 300.0, 2_700.0, RATE_HZ), np.exp(2j * np.pi * 1_000.0 * T) * turn)[
        0, STEADY
    ]
    assert tone_lines(single, RATE_HZ, 1_025.0)[1] == pytest.approx(1.0, rel=1e-3)
    double = coherent(BAND, np.cos(2 * np.pi * 1_000.0 * T) * turn)[0, STEADY]
    _, left_db = fit(double, (np.cos(2 * np.pi * 1_000.0 * T) * np.cos(2 * np.pi * error_hz * T))[STEADY])
    assert left_db < -50.0
    full = envelope((1 + 0.5 * np.cos(2 * np.pi * 1_000.0 * T)) * turn)[STEADY]
    assert tone_lines(full, RATE_HZ, 1_000.0)[1] == pytest.approx(0.5, rel=1e-3)


UNWANTED_SIDEBAND_DB = -60.0  # the house plan's figure


@pytest.mark.parametrize("band_hz", [(300.0, 2_700.0), (100.0, 4_500.0), (250.0, 3_000.0)])
def test_unwanted_sideband(band_hz):
    taps = one_sideband(Side.UPPER, *band_hz, RATE_HZ)
    wrong = np.conj(noise_message(N, RATE_HZ, *band_hz, 3) + 1j * hilbert(noise_message(N, RATE_HZ, *band_hz, 3)))
    heard, sent = coherent(taps, wrong)[0, STEADY], np.real(wrong)[STEADY]
    assert 10 * np.log10(np.mean(heard**2) / np.mean(sent**2)) < UNWANTED_SIDEBAND_DB


@pytest.mark.parametrize("vestige_hz", [450.0, 1_125.0])
@pytest.mark.parametrize("flat", [False, True])
@pytest.mark.parametrize("side", [Side.UPPER, Side.LOWER])
def test_vestigial_slopes_add_up_to_a_constant(vestige_hz, flat, side):
    """H(fc + f) + H(fc - f) constant gives a flat message: check values 5.4 (Haykin; Proakis and Salehi)."""
    message = noise_message(N, RATE_HZ, LOW_HZ, HIGH_HZ, 4)
    how = Modulation(vestige_hz=vestige_hz, vestige_is_flat=flat)
    name = "VSB-SC-USB" if side is Side.UPPER else "VSB-SC-LSB"
    sent = modulate(EMISSIONS[name], message[None], RATE_HZ, how)
    weigh = vestigial.weight_for_received if flat else vestigial.weight_for_sent
    taps = vestigial.vestigial(side, lambda f: weigh(f, vestige_hz), BAND, RATE_HZ)
    (gain,), left_db = fit(coherent(taps, sent.envelope)[0, STEADY], sent.messages[0, STEADY])
    assert gain == pytest.approx(1.0, abs=1e-3)
    assert left_db < -52.0  # corners of the weighting, rounded off by its 385 taps


@pytest.mark.parametrize("weigh", [vestigial.weight_for_received, lambda f, v: 0.5 + 0.5 * np.clip(f / v, -1, 1)])
def test_a_receiver_that_shapes_alone_is_6_db_down_at_the_carrier(weigh):
    """Response -6.02 dB at the carrier, and H(fc + f) + H(fc - f) constant throughout: check values 5.4 (Haykin). The
    taps' own response, by a carrier and pairs of tones sent through the detector.
    """
    flat = np.zeros(3, complex)
    flat[1] = 1.0
    taps = vestigial.vestigial(Side.UPPER, lambda f: weigh(f, 1_125.0), flat, RATE_HZ)
    carrier = coherent(taps, np.ones(N))[0, STEADY]
    assert 20 * np.log10(carrier.mean()) == pytest.approx(-6.02, abs=0.01)
    for tone_hz in (100.0, 400.0, 800.0, 1_000.0, 1_125.0, 2_000.0):
        both = 2 * np.cos(2 * np.pi * tone_hz * T)
        lines = tone_lines(coherent(taps, both)[0, STEADY], RATE_HZ, tone_hz, 1)
        assert lines[1] == pytest.approx(1.0, abs=2e-3)


def test_best_vestigial_weighting_lets_less_noise_through_than_addition():
    """Maximum-ratio combining of two copies in equal noise (D. G. Brennan, Proc. IRE 47 (1959) 1075-1102): within the
    slope noise falls by a factor of h^2 + (1 - h)^2, to a half at most.
    """
    frequency_hz = np.linspace(1.0, 1_124.0, 500)
    best = (
        vestigial.weight_for_sent(frequency_hz, 1_125.0) ** 2 + vestigial.weight_for_sent(-frequency_hz, 1_125.0) ** 2
    )
    slope = vestigial.sent_slope(frequency_hz, 1_125.0)
    np.testing.assert_allclose(best, 1 / (slope**2 + (1 - slope) ** 2), rtol=1e-9)
    assert np.all(best <= 2.0 + 1e-9)


@pytest.mark.parametrize(
    ("depth", "ratio", "percent"),
    [(0.3, 0.25, 0.47), (0.3, 0.5, 1.89), (0.3, 0.75, 4.24), (0.3, 1.0, 7.50), (0.5, 0.25, 0.80), (0.5, 0.5, 3.20),
     (0.5, 0.75, 7.12), (0.5, 1.0, 12.47), (0.8, 0.25, 1.34), (0.8, 0.5, 5.24), (0.8, 0.75, 11.41), (0.8, 1.0, 19.58)],
)  # fmt: skip
def test_vestigial_with_carrier_in_an_envelope_detector(depth, ratio, percent):
    """Straight slope, tone at r of its half-width, sideband sum kept: check values 5.4, computed."""
    tone_hz = 250.0
    edge_hz = tone_hz / ratio
    message = np.cos(2 * np.pi * tone_hz * T)
    how = Modulation(depth=depth, vestige_hz=edge_hz)
    iq = modulate(EMISSIONS["C3E-USB"], message[None], RATE_HZ, how).envelope
    lines = tone_lines(envelope(iq, low_hz=-edge_hz)[STEADY], RATE_HZ, tone_hz, orders=12)
    assert distortion_percent(lines) == pytest.approx(percent, abs=0.15)


def test_rectifier_is_two_over_pi_of_the_envelope():
    """A full-wave rectifier at a high intermediate frequency, low-pass filtered, made sample by sample: its mean is 2/pi
    of the envelope (Fourier series of |cos|, check values 5.1).
    """
    times = 40
    message = 0.6 * np.cos(2 * np.pi * 700.0 * T)
    fine_t = np.arange(N * times) / (RATE_HZ * times)
    carrier = np.cos(2 * np.pi * 83_456.7 * fine_t)
    rectified = np.abs((1 + 0.6 * np.cos(2 * np.pi * 700.0 * fine_t)) * carrier)
    spectrum = np.fft.rfft(rectified)[: N // 2 + 1] / times
    brute = np.fft.irfft(spectrum, N)
    ours = RECTIFIER_GAIN * envelope(1 + message)
    amplitude = tone_lines(brute[STEADY], RATE_HZ, 700.0)[1]
    # The brute rectifier's harmonics alias at 480 kHz: under 1 % of the fundamental.
    assert tone_lines(ours[STEADY], RATE_HZ, 700.0)[1] == pytest.approx(amplitude, rel=0.01)


def test_quadrature_stereo_law_at_its_extreme():
    """L = -0.75, R = 0: phase 1.249 rad, envelope 0.25 (47 CFR 73.128(c)(5), from memory; computed atan(0.75 / 0.25))."""
    messages = np.stack([-np.ones(16), np.zeros(16)])
    sent = modulate(EMISSIONS["AM-STEREO"], messages, RATE_HZ, Modulation(depth=1.5, stereo_pilot=False)).envelope
    assert np.angle(sent[0]) == pytest.approx(-1.249, abs=1e-3)
    assert abs(sent[0]) == pytest.approx(0.25, rel=1e-9)
    both = sum_and_difference(sent[:1].astype(np.complex64)[None])[0, 0]
    assert both == pytest.approx(0.25 - 0.75j, abs=1e-5)


SEPARATION_DB = 40.0  # check values, tenth list, no. 7


def test_stereo_separation():
    rate_hz, n = 48_000.0, 72_000  # the law's phase is much wider than its messages: at 24 kHz it would fold
    left = noise_message(n, rate_hz, 100.0, 4_500.0, 5)
    sent = modulate(EMISSIONS["AM-STEREO"], np.stack([left, np.zeros(n)]), rate_hz, Modulation(depth=0.8))
    taps = left_and_right_taps(both_sidebands(100.0, 4_500.0, rate_hz, steep=True))
    heard = through(CoherentDetector(taps[None], 1), sum_and_difference(sent.envelope.astype(np.complex64)[None]))[0]
    steady = slice(8_000, n - 8_000)
    assert 10 * np.log10(np.mean(heard[0, steady] ** 2) / np.mean(heard[1, steady] ** 2)) > SEPARATION_DB
