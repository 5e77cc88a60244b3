"""What everyone in the trade knows, shown with the project's own modulators and detectors. All: common practice."""

import numpy as np
import pytest
from signals import distortion_percent, fit, hilbert, noise_message, through, tone_lines

from rxchain.detectors import vestigial
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.envelope import EnvelopeDetector, emission_band
from rxchain.detectors.sidebands import both_sidebands, one_sideband, quarter_turned
from rxchain.emissions import EMISSIONS, Side
from rxchain.synthesis.messages import Message
from rxchain.synthesis.modulation import Modulation, modulate
from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Scene, Station

RATE_HZ = 12_000.0
N = 24_000
T = np.arange(N) / RATE_HZ
STEADY = slice(2_000, N - 2_000)
BAND = both_sidebands(100.0, 4_500.0, RATE_HZ)
CLEAN_DB = -60.0


def coherent(taps, iq):
    return through(CoherentDetector(np.atleast_2d(taps)[None], 1), iq.astype(np.complex64)[None])[0][:, STEADY]


def envelope(iq, low_hz=-4_500.0):
    detector = EnvelopeDetector([emission_band(low_hz, 4_500.0, RATE_HZ)], [BAND], 4)
    return through(detector, iq.astype(np.complex64)[None])[0, 0, STEADY]


def tone(frequency_hz):
    return np.cos(2 * np.pi * frequency_hz * T)


def test_a_product_with_a_cosine_puts_two_half_copies_and_doubles_the_bandwidth():
    """Common practice: m cos(2 pi fc t) has M / 2 about +fc and about -fc, and is twice as wide as m."""
    carrier_hz, width_hz = 6_000.0, 2_700.0
    station = Station(
        "one", EMISSIONS["DSB-SC"], carrier_hz, 0.0, (Message("noise"),), (300.0, width_hz), phase_degrees=0.0
    )
    rendered = render(Scene(48_000.0, 0.0, 2.0, (station,)))
    real = np.real(rendered.iq).astype(float)  # what is on the air is real: the product with a cosine
    truth = rendered.truths[0]
    spectrum = np.fft.fft(real) / len(real)
    frequency_hz = np.fft.fftfreq(len(real), 1 / 48_000.0)
    for sign in (1, -1):
        near = np.abs(frequency_hz - sign * carrier_hz) <= width_hz + 50
        assert np.sum(np.abs(spectrum[near]) ** 2) == pytest.approx(np.mean(truth.messages**2) / 4, rel=0.005)
    inside = np.abs(np.abs(frequency_hz) - carrier_hz) <= width_hz + 1
    assert np.sum(np.abs(spectrum[~inside]) ** 2) < 1e-4 * np.sum(np.abs(spectrum) ** 2)
    upper = (frequency_hz > carrier_hz + 300) & (frequency_hz < carrier_hz + width_hz)
    lower = (frequency_hz < carrier_hz - 300) & (frequency_hz > carrier_hz - width_hz)
    assert np.sum(np.abs(spectrum[upper]) ** 2) == pytest.approx(np.sum(np.abs(spectrum[lower]) ** 2), rel=0.01)


def test_the_envelope_of_a_suppressed_carrier_loses_the_sign():
    """Common practice: |m| has no component at m's own frequency; the coherent detector gives m back."""
    message = tone(800.0)
    sent = modulate(EMISSIONS["DSB-SC"], message[None], RATE_HZ, Modulation())
    assert tone_lines(envelope(sent.envelope), RATE_HZ, 800.0)[1] < 1e-3
    (gain,), left_db = fit(coherent(BAND, sent.envelope)[0], message[STEADY])
    assert gain == pytest.approx(1.0, rel=1e-3)
    assert left_db < CLEAN_DB


@pytest.mark.parametrize(("index", "is_faithful"), [(0.5, True), (0.95, True), (1.0, True), (1.2, False), (2.0, False)])
def test_an_envelope_detector_is_faithful_while_the_carrier_exceeds_the_message(index, is_faithful):
    """Common practice: an index up to 1 is demodulated cleanly, beyond it the envelope folds."""
    message = noise_message(N, RATE_HZ, 100.0, 4_500.0, 6)
    sent = modulate(EMISSIONS["A3E"], message[None], RATE_HZ, Modulation(depth=index))
    _, left_db = fit(envelope(sent.envelope), message[STEADY])
    assert (left_db < CLEAN_DB) == is_faithful
    _, coherent_db = fit(coherent(BAND, sent.envelope)[0], message[STEADY])
    assert coherent_db < CLEAN_DB


@pytest.mark.parametrize(("carrier", "is_faithful"), [(0.7, False), (0.95, False), (1.0, True), (1.5, True)])
def test_a_carrier_added_to_a_suppressed_one_must_exceed_the_peak(carrier, is_faithful):
    """Common practice: with a carrier put back at the receiver an envelope detector does, if it is strong enough."""
    message = tone(300.0)  # its peak is 1, and it is there all the time
    sent = modulate(EMISSIONS["DSB-SC"], message[None], RATE_HZ, Modulation())
    _, left_db = fit(envelope(sent.envelope + carrier), message[STEADY])
    assert (left_db < CLEAN_DB) == is_faithful


def test_efficiency_is_sideband_power_over_total_power():
    """Common practice: what is left when the carrier is taken out is all that carries the message."""
    message = noise_message(N, RATE_HZ, 100.0, 4_500.0, 7)
    iq = modulate(EMISSIONS["A3E"], message[None], RATE_HZ, Modulation(depth=0.9)).envelope
    total = np.mean(np.abs(iq[STEADY]) ** 2)
    heard = np.mean(coherent(BAND, iq)[0] ** 2)  # both sidebands fold onto the message and bring all their power
    sent = 0.81 * np.mean(message[STEADY] ** 2)
    mean = 2 * 0.9 * np.mean(message[STEADY])  # what the stretch at hand is off the message's mean of 0
    assert heard / total == pytest.approx(sent / (1 + sent + mean), rel=1e-3)
    upper = coherent(one_sideband(Side.UPPER, 100.0, 4_500.0, RATE_HZ), iq)[0]
    assert np.mean(upper**2) / heard == pytest.approx(0.25, rel=0.01)  # half the voltage by one sideband


def test_two_messages_share_a_band_in_quadrature_and_come_apart_only_coherently():
    """Common practice: two messages of bandwidth B fit 2 B; an envelope detector hears a mixture of both."""
    first, second = (noise_message(N, RATE_HZ, 100.0, 4_500.0, seed) for seed in (8, 9))
    sent = modulate(EMISSIONS["QAM"], np.stack([first, second]), RATE_HZ, Modulation())
    spectrum = np.abs(np.fft.fft(sent.envelope)) ** 2
    assert np.sum(spectrum[np.abs(np.fft.fftfreq(N, 1 / RATE_HZ)) > 4_500.0]) < 1e-9 * np.sum(spectrum)
    heard = coherent(np.stack([BAND, quarter_turned(BAND)]), sent.envelope)
    for one, message in zip(heard, sent.messages, strict=True):
        _, left_db = fit(one, message[STEADY])
        assert left_db < CLEAN_DB
    _, mixed_db = fit(envelope(sent.envelope), first[STEADY], second[STEADY])
    assert mixed_db > 0.0


@pytest.mark.parametrize(("name", "sign"), [("J3E-USB", -1), ("J3E-LSB", +1)])
def test_single_sideband_is_the_message_and_its_hilbert_transform(name, sign):
    """Common practice: m cos -/+ m^ sin, minus for the upper sideband; its spectrum lies on one side alone."""
    message = noise_message(N, RATE_HZ, 300.0, 2_700.0, 10)
    sent = modulate(EMISSIONS[name], message[None], RATE_HZ, Modulation())
    scale = sent.messages[0, 100] / message[100]
    carrier = 2 * np.pi * 3_000.0 * T
    on_the_air = np.real(sent.envelope * np.exp(1j * carrier)) / scale
    np.testing.assert_allclose(
        on_the_air, message * np.cos(carrier) + sign * hilbert(message) * np.sin(carrier), atol=1e-9
    )
    side = Side.UPPER if name == "J3E-USB" else Side.LOWER
    _, left_db = fit(coherent(one_sideband(side, 300.0, 2_700.0, RATE_HZ), sent.envelope)[0], sent.messages[0, STEADY])
    assert left_db < CLEAN_DB
    other = Side(-side)
    wrong = coherent(one_sideband(other, 300.0, 2_700.0, RATE_HZ), sent.envelope)[0]
    assert 10 * np.log10(np.mean(wrong**2) / np.mean(sent.messages**2)) < CLEAN_DB


def test_carrier_needed_by_an_envelope_detector_grows_from_double_to_vestigial_to_single_sideband():
    """Common practice: for one distortion, here 5 % of a tone within the vestige, sidebands that mirror each other less
    need more carrier.
    """
    message = tone(500.0)

    def distortion(name, depth):
        how = Modulation(depth=depth, vestige_hz=1_000.0)
        if name == "J3E-USB":
            iq = 1 + depth * np.exp(2j * np.pi * 500.0 * T)
        else:
            iq = modulate(EMISSIONS[name], message[None], RATE_HZ, how).envelope
        return distortion_percent(tone_lines(envelope(iq), RATE_HZ, 500.0, orders=8))

    def greatest_depth(name):
        """By halving: distortion grows with depth."""
        low, high = 0.02, 1.0
        if distortion(name, high) <= 5.0:
            return high
        while high - low > 0.01:
            middle = (low + high) / 2
            low, high = (middle, high) if distortion(name, middle) <= 5.0 else (low, middle)
        return low

    greatest = {name: greatest_depth(name) for name in ("A3E", "C3E-USB", "J3E-USB")}
    # The greater the sidebands that 5 % allows, the less carrier is needed for them.
    assert greatest["A3E"] > 1.3 * greatest["C3E-USB"] > 1.3 * 1.3 * greatest["J3E-USB"]


def test_a_vestigial_emission_is_one_and_a_quarter_to_one_and_a_half_bandwidths_wide():
    """Common practice: with vestiges of a quarter to a half of the message's band, the default among them."""
    message = noise_message(N, RATE_HZ, 100.0, 4_000.0, 11)
    for share in (0.25, 0.5):
        how = Modulation(vestige_hz=share * 4_000.0)
        iq = modulate(EMISSIONS["VSB-SC-USB"], message[None], RATE_HZ, how).envelope
        spectrum = np.abs(np.fft.fft(iq)) ** 2
        occupied_hz = np.fft.fftfreq(N, 1 / RATE_HZ)[spectrum > 1e-6 * spectrum.max()]
        width = (occupied_hz.max() - occupied_hz.min()) / 4_000.0
        assert 1.0 + share - 0.03 < width < 1.0 + share + 0.03


def test_receiver_and_transmitter_slopes_must_add_up_to_a_constant():
    """Common practice: transmitter times receiver, above the carrier plus below it, is the message's response. Where the
    slopes match the message comes out flat; one that is wider than the other tilts the lows.
    """
    message = noise_message(N, RATE_HZ, 100.0, 4_500.0, 14)
    how = Modulation(vestige_hz=1_000.0)
    sent = modulate(EMISSIONS["VSB-SC-USB"], message[None], RATE_HZ, how)

    def left_over_db(weight):
        taps = vestigial.vestigial(Side.UPPER, weight, BAND, RATE_HZ)
        return fit(coherent(taps, sent.envelope)[0], sent.messages[0, STEADY])[1]

    # Complementary sent slopes added as they are, and the best weighting: both products add up to 1.
    assert left_over_db(np.ones_like) < CLEAN_DB
    assert left_over_db(lambda f: vestigial.weight_for_sent(f, 1_000.0)) < CLEAN_DB
    # The same slope again at the receiver squares it: at the carrier a quarter and a quarter make a half.
    assert left_over_db(lambda f: vestigial.sent_slope(f, 1_000.0)) > -30.0
    assert left_over_db(lambda f: vestigial.weight_for_sent(f, 2_000.0)) > -30.0
