"""Offset, carrier-to-noise density and level of followed carriers, against bounds and against known powers."""

import numpy as np
import pytest
from known_channels import AMPLITUDE, known, noise, values

from rxchain.carrier.track import Lock

SEED = 9


@pytest.mark.parametrize("strength_dbhz", [35.0, 45.0, 60.0])
def test_offset_meets_the_bound(strength_dbhz):
    """var(f) >= 6 / ((2 pi)^2 T^3 C/N0), C/N0 per hertz of complex noise: D. C. Rife, R. R. Boorstyn, IEEE Trans. Inf.
    Theory IT-20 (1974) 591-598. 48 channels know their rms error to 10 %.
    """
    group = known("A3E", noise, 4.0, 48, SEED, noise_density_db=-strength_dbhz, offset_hz=-3.7)
    seconds = group.turned.iq.shape[1] / group.rate_hz
    value, deviation = values(group.figures(), "carrier_offset_hz")
    bound_hz = np.sqrt(6 / (4 * np.pi**2 * seconds**3 * 10 ** (strength_dbhz / 10)))
    error = value + 3.7
    assert np.sqrt(np.mean(error**2)) < 1.35 * bound_hz
    assert np.mean(np.abs(error) < deviation) >= 0.58
    assert np.median(deviation) < 4 * bound_hz


@pytest.mark.parametrize("wander_rad2_per_s", [0.1, 1.0])
def test_offset_of_a_wandering_carrier_says_how_sure_it_is(wander_rad2_per_s):
    """Against the mean frequency of the time measured, by the phase at its ends."""
    group = known("A3E", noise, 8.0, 48, SEED, noise_density_db=-60.0, wander_rad2_per_s=wander_rad2_per_s)
    value, deviation = values(group.figures(), "carrier_offset_hz")
    score = np.abs(value - group.offset_hz) / deviation
    assert np.mean(score < 1) >= 0.58
    assert np.sqrt(np.mean(score**2)) > 0.4


def test_offset_counts_from_stretches_with_lock_alone():
    """Between them the follower may have been anywhere: the slopes of the stretches are joined, never the phases."""
    group = known("A3E", noise, 8.0, 4, SEED, noise_density_db=-60.0, offset_hz=12.0)
    track = group.turned.track
    middle = track.lock.shape[1] // 2
    gap = slice(middle - 60, middle + 60)
    track.lock[:, gap] = Lock.NONE
    track.phase_cycles[:, gap] += 50.0
    track.phase_cycles[:, gap.stop :] += 17.3
    assert values(group.figures(), "carrier_offset_hz")[0] == pytest.approx(12.0, abs=0.01)


@pytest.mark.parametrize(
    ("name", "snr_db"), [("A3E", 20.0), ("R3E-USB", 20.0), ("H3E-LSB", 10.0), ("B8E", 20.0), ("QAM", 20.0)]
)
def test_carrier_to_noise_density(name, snr_db):
    group = known(name, noise, 8.0, 12, SEED, snr_db=snr_db)
    value, deviation = values(group.figures(), "carrier_to_noise_density_dbhz")
    error = value - group.carrier_to_noise_density_dbhz
    assert np.abs(error).max() < 0.5
    assert np.mean(np.abs(error) < 2 * deviation) >= 0.9


@pytest.mark.parametrize("strength_dbhz", [35.0, 45.0, 60.0, 75.0])
def test_carrier_to_noise_density_from_weak_to_strong(strength_dbhz):
    group = known("A3E", noise, 8.0, 12, SEED, noise_density_db=-strength_dbhz)
    value, deviation = values(group.figures(), "carrier_to_noise_density_dbhz")
    assert np.abs(value - strength_dbhz).max() < 0.3
    assert np.all((deviation > 0) & (deviation < 0.3))


def test_level_against_a_full_scale_tone():
    """A complex tone of amplitude 1 is 0 dBFS (the definition); A3E adds mu^2 of the message's power."""
    group = known("A3E", lambda n, *_: np.full(n, 1e-12), 3.0, 2, SEED, noise_density_db=-120.0)
    value, deviation = values(group.figures(), "level_dbfs")
    assert value == pytest.approx(20 * np.log10(AMPLITUDE), abs=0.01)
    assert np.all(deviation > 0)
    assert values(known("A3E", noise, 6.0, 4, SEED).figures(), "level_dbfs")[0] == pytest.approx(
        known("A3E", noise, 6.0, 4, SEED).level_dbfs, abs=0.02
    )


@pytest.mark.parametrize("name", ["A3E", "R3E-LSB", "H3E-USB", "B8E", "QAM"])
def test_efficiency_is_the_sidebands_share_of_the_power(name):
    group = known(name, noise, 8.0, 4, SEED, snr_db=20.0)
    assert values(group.figures(), "power_efficiency_percent")[0] == pytest.approx(group.efficiency_percent, abs=0.5)
