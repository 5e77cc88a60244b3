"""The channel bank against a direct float64 receiver, and its filter against the promised figures."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rxchain.errors import SettingError
from rxchain.kernels.fir import lowpass
from rxchain.tuning.channel_bank import ChannelBank
from rxchain.tuning.plan import STOP_DB, plan_bank

RATES_HZ = [8_000.0, 12_001.1321, 22_050.0, 44_100.0, 48_000.0, 240_000.0, 2_048_000.0, 2_400_000.0, 1_234_567.0, 3.2e6]
# complex64 arithmetic and the bins left out of a slice; the filter itself stops 86 dB
SAME_AS_DIRECT_DB = -78.0
RIPPLE_DB = 0.05
UNWANTED_DB = -80.0


def run(plan, groups, iq, cuts=()):
    bank = ChannelBank(plan, groups)
    parts = [bank.process(piece) for piece in np.split(iq, sorted(cuts))] + [bank.flush()]
    return [np.concatenate([part[k] for part in parts], axis=1) for k in range(len(groups))]


def direct(iq, offset_hz, plan, bins):
    """Mix, filter, keep the samples whose instants fall on input samples: the slow way, in float64."""
    mixed = iq.astype(complex) * np.exp(-2j * np.pi * offset_hz / plan.capture_rate_hz * np.arange(len(iq)))
    if bins == plan.length:
        return mixed, np.arange(len(iq))
    cutoff_hz = (plan.rate_hz(bins) / 2 + plan.usable_hz(bins)) / 2
    taps = lowpass(plan.overlap + 1, cutoff_hz, plan.capture_rate_hz, STOP_DB)
    n = 2 ** int(np.ceil(np.log2(len(iq) + len(taps))))
    filtered = np.fft.ifft(np.fft.fft(mixed, n) * np.fft.fft(taps, n))
    position = np.arange(-(-len(iq) * bins // plan.length)) * plan.length / bins + plan.overlap / 2
    whole = np.flatnonzero(np.abs(position - np.round(position)) < 1e-9)
    return filtered[np.round(position[whole]).astype(int)], whole


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_equals_the_direct_receiver_at_every_width(rate_hz, rng):
    plan = plan_bank(rate_hz)
    n = min(int(0.25 * rate_hz), 300_000)
    iq = (rng.normal(size=n) + 1j * rng.normal(size=n)).astype(np.complex64)
    offsets_hz = np.array([0.1234 * rate_hz, -0.21 * rate_hz, 0.0, 0.03 * rate_hz + 0.37])
    for bins in {plan.widths[0], plan.widths[-1]}:
        (channels,) = run(plan, [(bins, offsets_hz)], iq)
        assert channels.dtype == np.complex64
        assert channels.shape == (4, -(-n * bins // plan.length))
        for offset_hz, channel in zip(offsets_hz, channels, strict=True):
            expected, where = direct(iq, offset_hz, plan, bins)
            error = np.mean(np.abs(channel[where] - expected) ** 2) / np.mean(np.abs(expected) ** 2)
            assert 10 * np.log10(error) < SAME_AS_DIRECT_DB


@pytest.mark.parametrize("rate_hz", [48_000.0, 44_100.0, 240_000.0, 2_048_000.0, 2_400_000.0])
def test_ripple_and_unwanted_responses(rate_hz):
    """Tones through the bank: flat within the usable band, 80 dB down wherever an alias would fall into it."""
    plan = plan_bank(rate_hz)
    bins = plan.base_bins
    usable_hz, channel_hz = plan.usable_hz(bins), plan.rate_hz(bins)
    n = 10 * plan.length
    t = np.arange(n) / rate_hz
    centre_hz = 0.07 * rate_hz + 1.7
    inside_hz = np.linspace(-usable_hz, usable_hz, 25)
    levels_db = [_level_db(plan, bins, centre_hz, centre_hz + f, t) for f in inside_hz]
    assert max(levels_db) < RIPPLE_DB
    assert min(levels_db) > -RIPPLE_DB
    outside_hz = np.concatenate(
        [
            np.linspace(channel_hz - usable_hz, channel_hz, 12),
            np.linspace(channel_hz, 0.4 * rate_hz, 12),
        ]
    )
    for f in np.concatenate([outside_hz, -outside_hz]):
        assert _level_db(plan, bins, centre_hz, centre_hz + f, t) < UNWANTED_DB


def _level_db(plan, bins, centre_hz, tone_hz, t):
    tone = np.exp(2j * np.pi * tone_hz * t).astype(np.complex64)
    (channel,) = run(plan, [(bins, np.array([centre_hz]))], tone)
    steady = channel[0, 2 * bins : -2 * bins]
    # The worst moment, not the mean: a response that changes with time counts.
    power = np.abs(steady) ** 2
    return 10 * np.log10(power.max() if power.mean() < 0.5 else power[np.argmax(np.abs(power - 1))])


@given(cuts=st.lists(st.integers(0, 30_000), max_size=30))
@settings(max_examples=30, deadline=None)
def test_any_split_gives_the_same_channels(cuts):
    rng = np.random.default_rng(5)
    iq = (rng.normal(size=30_000) + 1j * rng.normal(size=30_000)).astype(np.complex64)
    plan = plan_bank(240_000.0)
    groups = [(plan.base_bins, np.array([1e3, -50_432.1])), (plan.base_bins * 2, np.array([70e3]))]
    whole, split = run(plan, groups, iq), run(plan, groups, iq, cuts)
    for one, other in zip(whole, split, strict=True):
        np.testing.assert_array_equal(one, other)


def test_phase_is_true_to_the_sample_index_after_a_long_time():
    """A tone at the channel's frequency comes out with the phase it has, an hour of samples later too."""
    plan = plan_bank(240_000.0)
    bank = ChannelBank(plan, [(plan.base_bins, np.array([12_345.678]))])
    skipped = 3600 * 240_000 // (4 * plan.hop)
    bank._hops += 4 * skipped  # time passes without computing it
    start = skipped * 4 * plan.hop
    t = (start + np.arange(40 * plan.hop)) / 240_000.0
    tone = np.exp(2j * np.pi * np.mod(12_345.678 * t, 1.0)).astype(np.complex64)
    channel = np.concatenate([bank.process(tone)[0], bank.flush()[0]], axis=1)[0, 400:-400]
    assert np.max(np.abs(np.angle(channel))) < 1e-3


def test_rates_outside_the_range_are_refused():
    with pytest.raises(SettingError, match="8 kS/s"):
        plan_bank(7_999.0)
    with pytest.raises(SettingError, match=r"3\.2 MS/s"):
        plan_bank(3.3e6)
