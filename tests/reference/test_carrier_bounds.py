"""The followers against the bounds of estimation theory, and against carriers off the air whose truth is known."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from rxchain.carrier.follower import CarrierFollower, FollowerSettings
from rxchain.carrier.track import Follow, Lock

OFF_AIR = Path(__file__).resolve().parents[3] / "shared" / "recordings" / "offair"
RATE_HZ = 12_000.0
CHANNELS = 16
SECONDS = 9.0
FROM_S = 3.0


class Line:
    """An unmodulated line in white noise through a follower, and what the follower made of it from 3 s on."""

    def __init__(self, kind: Follow, cn0_dbhz: float) -> None:
        rng = np.random.default_rng(int(cn0_dbhz))
        n = int(SECONDS * RATE_HZ)
        t = np.arange(n) / RATE_HZ
        offset_hz = rng.uniform(-200.0, 200.0, (CHANNELS, 1))
        self.cn0 = 10 ** (cn0_dbhz / 10)
        noise = rng.standard_normal((2, CHANNELS, n)) * np.sqrt(0.01 / self.cn0 * RATE_HZ / 2)
        iq = (0.1 * np.exp(2j * np.pi * offset_hz * t) + noise[0] + 1j * noise[1]).astype(np.complex64)
        follower = CarrierFollower(FollowerSettings(kind), CHANNELS, RATE_HZ)
        pieces, bandwidths_hz = [], []
        for k in range(0, n, 3072):
            pieces.append(follower.process(iq[:, k : k + 3072]))
            bandwidths_hz.append(follower.bandwidth_hz)
        pieces.append(follower.flush())
        tracks = [piece.track for piece in pieces]
        hops = sum(track.lock.shape[1] for track in tracks)
        when = ((np.arange(hops) + 0.5) * follower.hop_samples - 0.5) / RATE_HZ
        late = (when > FROM_S) & (when < SECONDS - 0.3)
        phase = np.concatenate([track.phase_cycles for track in tracks], axis=1) - offset_hz * when
        self.phase_rad = 2 * np.pi * (phase - np.rint(phase))[:, late]
        self.frequency_error_hz = (np.concatenate([track.offset_hz for track in tracks], axis=1) - offset_hz)[:, late]
        self.amplitude = np.concatenate([track.amplitude for track in tracks], axis=1)[:, late]
        self.noise_density = np.concatenate([track.noise_density for track in tracks], axis=1)[:, late]
        self.lock = np.concatenate([track.lock for track in tracks], axis=1)[:, late]
        self.bandwidth_hz = np.mean(bandwidths_hz[len(bandwidths_hz) // 3 :], axis=0)


@pytest.fixture(scope="module", params=[(kind, cn0) for kind in (Follow.CARRIER, Follow.PILOT) for cn0 in (30, 40, 50)])
def line(request: pytest.FixtureRequest) -> Line:
    return Line(*request.param)


def test_phase_jitter_is_the_thermal_noise_of_its_bandwidth(line: Line) -> None:
    """Variance ``Bn / (C/N0)`` rad^2: F. M. Gardner, "Phaselock Techniques", chapter on noise."""
    thermal = np.mean(line.bandwidth_hz) / line.cn0
    ratio_db = 10 * np.log10(np.mean(line.phase_rad**2) / thermal)
    # The width chosen depends on the noise itself, which costs up to 1.5 dB; 0.7 dB are the spread of 16 channels.
    assert -0.7 < ratio_db < 1.5
    assert np.all(line.lock == Lock.LOCKED)


def test_frequency_is_near_the_bound_of_its_memory(line: Line) -> None:
    """Cramer-Rao bound of a tone over a time T, ``6 / ((2 pi)^2 C/N0 T^3)`` Hz^2: Rife and Boorstyn 1974."""
    error_hz = np.sqrt(np.mean(line.frequency_error_hz**2))
    memory_s = (6.0 / ((2 * np.pi) ** 2 * line.cn0 * error_hz**2)) ** (1 / 3)
    # As good as all that was received in the last quarter of a second at the least, as the filter also follows drift.
    assert 0.25 < memory_s < 2.0


def test_readings_of_carrier_and_noise_are_right(line: Line) -> None:
    spread_db = 0.1  # 16 channels, 5.7 s of 5 Hz or so
    assert abs(20 * np.log10(line.amplitude.mean() / 0.1)) < spread_db
    cn0_db = 10 * np.log10(line.cn0)
    read_db = 10 * np.log10(np.mean(line.amplitude**2) / np.mean(line.noise_density))
    assert abs(read_db - cn0_db) < 0.4  # the pilots' longer overlap leaves 0.2 dB


def test_square_reads_the_noise_beside_a_suppressed_carrier() -> None:
    """Noise across the line of the square gives back the noise it was made of: S. O. Rice 1945, square-law device."""
    rng = np.random.default_rng(8)
    n = int(8 * RATE_HZ)
    message = np.repeat(rng.choice([-1.0, 1.0], n // 12 + 1), 12)[:n]
    for density in (1e-8, 1e-6):
        noise = rng.standard_normal((2, 8, n)) * np.sqrt(density * RATE_HZ / 2)
        iq = 0.1 * message + noise[0] + 1j * noise[1]
        follower = CarrierFollower(FollowerSettings(Follow.SQUARE, message_hz=(0.0, 6000.0)), 8, RATE_HZ)
        track = follower.process(iq.astype(np.complex64)).track
        late = slice(-400, None)
        assert np.all(track.lock[:, late] == Lock.LOCKED)
        assert abs(10 * np.log10(np.mean(track.noise_density[:, late]) / density)) < 0.7


@pytest.mark.parametrize(("number", "offset_hz"), [(1, 0.012), (2, 0.011), (3, 0.007)])
def test_a_time_signal_off_the_air_stays_locked_and_reads_its_offset(number: int, offset_hz: float) -> None:
    """DCF77, keyed to 15 % once a second; offsets as listed with the recordings."""
    path = OFF_AIR / f"dcf77-2017-{number}.sigmf-data"
    if not path.is_file():
        pytest.skip(f"no recording {path}")
    rate_hz = json.loads(path.with_suffix(".sigmf-meta").read_text())["global"]["core:sample_rate"]
    raw: NDArray[np.float32] = np.fromfile(path, "<i2").astype(np.float32).reshape(-1, 2) / 32768.0
    follower = CarrierFollower(FollowerSettings(Follow.CARRIER), 1, rate_hz)
    track = follower.process((raw[:, 0] + 1j * raw[:, 1])[None].astype(np.complex64)).track
    when = (np.arange(track.lock.shape[1]) + 0.5) * follower.hop_samples / rate_hz
    late = when > 2.0
    assert np.all(track.lock[0, late] == Lock.LOCKED)
    slope_hz = np.polyfit(when[late], track.phase_cycles[0, late], 1)[0]
    listed_to = 0.001
    assert abs(slope_hz - offset_hz) < listed_to
