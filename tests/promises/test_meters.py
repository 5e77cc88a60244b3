"""What the meters promise whatever they measure."""

from dataclasses import replace

import numpy as np
import pytest
from known_channels import RATE_HZ, Known, known, noise, values

from rxchain.carrier.track import Lock, Track, Turned
from rxchain.emissions import EMISSIONS
from rxchain.meters.figures import Figures

SEED = 21
NO_CARRIER = ("DSB-SC", "J3E-USB", "J3E-LSB", "VSB-SC-USB", "VSB-SC-LSB", "A1A")


def piece(turned: Turned, first: int, last: int) -> Turned:
    """Hops ``first`` to ``last`` of a stream."""
    track = turned.track
    names = ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")
    cut = Track(*(getattr(track, name)[:, first:last] for name in names))
    hop = turned.hop_samples
    return Turned(turned.iq[:, first * hop : last * hop], cut, hop)


def figures_in_pieces(group: Known, steps: list[int]) -> list[Figures]:
    meters = group.meters()
    first, hops = 0, group.turned.track.lock.shape[1]
    for k in range(hops):
        if first >= hops:
            break
        last = min(first + steps[k % len(steps)], hops)
        meters.process(piece(group.turned, first, last))
        first = last
    return meters.overall()


@pytest.mark.parametrize("name", ["A3E", "J3E-USB", "DSB-SC", "AM-STEREO", "C3E-USB"])
def test_any_split_of_the_stream_gives_the_same_figures(name):
    group = known(name, noise, 4.0, 3, SEED)
    whole = group.figures()
    for steps in ([4], [12, 4, 100], [48], [200, 1, 3]):
        assert figures_in_pieces(group, steps) == whole


@pytest.mark.parametrize("name", list(EMISSIONS))
def test_figures_without_meaning_are_none_and_all_others_finite(name):
    emission = EMISSIONS[name]
    group = known(name, noise, 5.0, 2, SEED)
    if emission.reference.value == "nominal":
        group.turned.track.lock[:] = Lock.NONE
    for figures in group.figures():
        assert figures.level_dbfs is not None
        assert (figures.depth_percent is not None) == emission.has_depth
        assert (figures.carrier_to_noise_density_dbhz is None) == (name in NO_CARRIER)
        assert (figures.power_efficiency_percent is None) == (name in NO_CARRIER)
        assert (figures.carrier_offset_hz is None) == (emission.reference.value == "nominal")
        for reading in figures.as_json().values():
            assert reading is None or (np.isfinite(reading["value"]) and 0 < reading["uncertainty"] < np.inf)


@pytest.mark.parametrize("name", ["A3E", "R3E-USB", "B8E", "QAM"])
def test_without_lock_nothing_is_said_of_a_carrier(name):
    group = known(name, noise, 4.0, 2, SEED)
    group.turned.track.lock[:] = Lock.NONE
    for figures in group.figures():
        assert figures.carrier_offset_hz is None
        assert figures.carrier_to_noise_density_dbhz is None
        assert figures.power_efficiency_percent is None
        assert figures.depth_percent is None


def test_before_any_samples_there_are_no_figures():
    meters = known("A3E", noise, 1.0, 2, SEED).meters()
    assert meters.overall() == meters.recent() == [Figures(), Figures()]


def test_reset_is_as_good_as_new():
    group, other = known("A3E", noise, 4.0, 2, SEED), known("A3E", noise, 3.0, 2, SEED + 1, snr_db=3.0)
    meters = group.meters()
    meters.process(other.turned)
    meters.mark_lost(40_000, 1_000)
    meters.reset()
    meters.process(group.turned)
    assert meters.overall() == group.figures()


@pytest.mark.parametrize("name", ["A3E", "J3E-USB"])
def test_lost_samples_count_in_no_figure(name):
    """Three seconds of zeros in the middle, marked as lost: every figure is that of the rest."""
    group = known(name, noise, 9.0, 3, SEED, snr_db=15.0)
    whole = group.figures()
    first, n = 36_000, 36_000
    iq = group.turned.iq.copy()
    iq[:, first : first + n] = 0
    damaged = replace(group, turned=replace(group.turned, iq=iq))
    meters = damaged.meters()
    meters.mark_lost(first, n)
    meters.process(damaged.turned)
    for field, allowed in (("snr_db", 0.3), ("level_dbfs", 0.2), ("depth_percent", 6.0)):
        told, expected = values(meters.overall(), field)[0], values(whole, field)[0]
        assert np.array_equal(np.isnan(told), np.isnan(expected))
        assert np.all(np.abs(told - expected)[~np.isnan(told)] < allowed)
    if name == "A3E":  # taken for samples, the zeros would have been seen
        assert np.abs(values(damaged.figures(), "level_dbfs")[0] - values(whole, "level_dbfs")[0]).min() > 1.0


def test_recent_figures_follow_a_change_and_overall_figures_keep_the_whole():
    strong, weak = known("A3E", noise, 6.0, 2, SEED, snr_db=30.0), known("A3E", noise, 6.0, 2, SEED, snr_db=10.0)
    meters = strong.meters()
    meters.process(strong.turned)
    meters.process(weak.turned)
    recent, overall = values(meters.recent(), "snr_db")[0], values(meters.overall(), "snr_db")[0]
    assert recent == pytest.approx(10.0, abs=0.5)
    # Equal times: the powers add, 2 S / (S / 1000 + S / 10).
    assert overall == pytest.approx(10 * np.log10(2 / (1e-3 + 1e-1)), abs=0.5)


def test_channels_do_not_touch_each_other():
    group = known("A3E", noise, 4.0, 3, SEED)
    alone = replace(
        group,
        channels=group.channels[:1],
        turned=replace(
            group.turned,
            iq=group.turned.iq[:1],
            track=Track(*(getattr(group.turned.track, n)[:1] for n in
                          ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock"))),
        ),
    )  # fmt: skip
    together, single = group.figures()[0], alone.figures()[0]
    for name, reading in single.as_json().items():
        same = together.as_json()[name]
        assert same is not None
        assert reading["value"] == pytest.approx(same["value"], rel=1e-4), name


def test_figures_do_not_depend_on_the_level():
    group = known("A3E", noise, 4.0, 2, SEED)
    for gain_db in (-80.0, 20.0):
        gain = np.float32(10 ** (gain_db / 20))
        louder = replace(group, turned=replace(group.turned, iq=group.turned.iq * gain))
        for name in ("snr_db", "depth_percent", "carrier_to_noise_density_dbhz", "power_efficiency_percent"):
            assert values(louder.figures(), name)[0] == pytest.approx(values(group.figures(), name)[0], abs=0.05)


def test_memory_is_bounded():
    """What the meters hold after a minute is what they held after ten seconds."""

    def held(thing: object, seen: set[int]) -> int:
        if id(thing) in seen:
            return 0
        seen.add(id(thing))
        if isinstance(thing, np.ndarray):
            return thing.nbytes
        if isinstance(thing, dict):
            return sum(held(one, seen) for one in thing.values())
        if hasattr(thing, "__slots__") and not hasattr(thing, "__dict__"):
            return sum(held(getattr(thing, name), seen) for name in thing.__slots__ if hasattr(thing, name))
        if hasattr(thing, "__dict__"):
            return held(vars(thing), seen)
        return sum(held(one, seen) for one in thing) if hasattr(thing, "__iter__") and not isinstance(thing, str) else 0

    group = known("A3E", noise, 10.0, 1, SEED)
    meters = group.meters()
    sizes = []
    for _ in range(6):
        meters.process(group.turned)
        meters.recent()
        meters.overall()
        sizes.append(held(meters, set()))
    assert sizes[-1] <= sizes[0]
    assert sizes[0] > RATE_HZ  # the rings were found


def test_other_channel_rates_read_the_same(rng):
    """A channel at 8 kHz: the same band, the same figures."""
    group = known("J3E-USB", noise, 8.0, 2, SEED, snr_db=20.0)
    iq = group.turned.iq
    n = iq.shape[1] * 2 // 3
    spectrum = np.fft.fftshift(np.fft.fft(iq, axis=1), axes=1)
    middle = iq.shape[1] // 2
    slow = np.fft.ifft(np.fft.ifftshift(spectrum[:, middle - n // 2 : middle - n // 2 + n], axes=1), axis=1) * (2 / 3)
    hops = n // 40
    flat = np.zeros((2, hops))
    turned = Turned(slow[:, : hops * 40].astype(np.complex64), Track(flat, flat, flat, flat, flat.astype(np.int8)), 40)
    other = replace(group, rate_hz=8_000.0, turned=turned)
    assert values(other.figures(), "snr_db")[0] == pytest.approx(20.0, abs=0.5)
