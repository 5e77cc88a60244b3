"""The parts that steer a USB receiver, on a clock of the tests' own: lost samples, gain, where to tune."""

import numpy as np
import pytest

from rxchain.chain.centre_choice import centre_beside, channels_on_spike
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.errors import SettingError
from rxchain.sources.arrival_watch import ArrivalWatch
from rxchain.sources.headroom import HIGHEST_DBFS, Headroom
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block

RATE_HZ = 2.4e6
N = 32_768
GAINS_DB = (0.0, 9.0, 19.7, 28.0, 40.2, 49.6)


def arrivals(n, error=0.0, jitter_s=0.003, seed=4):
    """When each of n buffers comes, by a clock that disagrees."""
    rng = np.random.default_rng(seed)
    return (np.arange(1, n + 1) * N / RATE_HZ) * (1 + error) + rng.uniform(0, jitter_s, n)


@pytest.mark.parametrize("error", [-200e-6, 200e-6])
def test_an_hour_of_a_clock_that_disagrees_loses_nothing(error):
    watch = ArrivalWatch(RATE_HZ, N)
    assert sum(watch.arrived(N, now_s) for now_s in arrivals(263_672, error)) == 0
    assert watch.late == 0


@pytest.mark.parametrize("n_lost", [1, 2, 30])
def test_whole_buffers_that_vanish_are_counted(n_lost):
    watch = ArrivalWatch(RATE_HZ, N)
    times = np.delete(arrivals(2_000), slice(500, 500 + n_lost))
    found = [watch.arrived(N, now_s) for now_s in times]
    assert sum(found) == pytest.approx(n_lost * N, abs=0.003 * RATE_HZ)  # within the wander of arrivals
    assert np.count_nonzero(found) <= 2


def test_late_buffers_that_are_made_up_for_are_late_and_not_lost():
    watch = ArrivalWatch(RATE_HZ, N)
    times = arrivals(2_000)
    times[500:530] = np.maximum(times[500:530], times[500] + 0.35)
    assert sum(watch.arrived(N, now_s) for now_s in times) == 0
    assert watch.late == 1


def settled_gain_db(level_dbfs_at_0_db):
    """The gain at which peaks of that level at 0 dB of gain end up."""
    headroom = Headroom(GAINS_DB, RATE_HZ)
    for _ in range(3_000):
        peak = 10 ** ((level_dbfs_at_0_db + headroom.gain_db) / 20)
        headroom.see(N, min(1.0, peak), N // 100 if peak >= 1.0 else 0)
    return headroom.gain_db


@pytest.mark.parametrize("level_dbfs", [-80.0, -45.0, -30.0, -10.0, -1.0, 10.0])
def test_the_gain_is_the_highest_that_leaves_room(level_dbfs):
    fitting = [gain for gain in GAINS_DB if level_dbfs + gain < 0.0] or [0.0]
    gain_db = settled_gain_db(level_dbfs)
    assert gain_db in fitting
    higher = [gain for gain in GAINS_DB if gain > gain_db]
    assert not higher or level_dbfs + higher[0] > HIGHEST_DBFS  # one more would come too close


def test_the_gain_does_not_hunt():
    headroom = Headroom(GAINS_DB, RATE_HZ)
    changes = 0
    for k in range(20_000):
        peak = 10 ** ((-38.0 + headroom.gain_db) / 20)
        changes += headroom.see(N, min(1.0, peak), N // 100 if peak >= 1.0 else 0) and k > 1_000
    assert changes == 0


def channels(*texts):
    return tuple(channel_from_text(text) for text in texts)


@pytest.mark.parametrize(
    "texts",
    [
        ["118.1MHz A3E"],
        ["118.1MHz A3E", "118.9MHz A3E"],
        ["118.1MHz A3E", "118.5MHz A3E", "118.9MHz A3E"],
        [f"{118e6 + 12_500.0 * k:.0f}Hz A3E" for k in range(150)],
    ],
)
def test_the_spike_is_kept_out_of_every_channel_and_all_are_received(texts):
    wanted = channels(*texts)
    centre_hz = centre_beside(wanted, RATE_HZ)
    assert channels_on_spike(wanted, centre_hz) == []
    for channel in wanted:
        assert abs(channel.frequency_hz - centre_hz) < 0.4 * RATE_HZ
        assert abs(channel.frequency_hz - centre_hz) >= 4_650.0
    assert channels_on_spike(wanted, wanted[0].frequency_hz + 1_000.0) == [wanted[0].name]


def test_channels_too_far_apart_for_the_rate():
    with pytest.raises(SettingError, match=r"rate=2.4MHz: the channels reach from 117.995\d*MHz to 121.00\d*MHz"):
        centre_beside(channels("118MHz A3E", "121MHz A3E"), RATE_HZ)


def test_a_channel_is_still_received_after_the_receiver_was_tuned_elsewhere():
    rate_hz, wanted = 240e3, channels("1.03MHz A3E agc=off squelch=off", "0.89MHz A3E agc=off squelch=off")
    receiver = Receiver(SourceInfo("receiver", "test", rate_hz, 1.0e6, None, None), wanted)
    t = np.arange(int(2.0 * rate_hz)) / rate_hz
    message = 1 + 0.5 * np.cos(2 * np.pi * 1000.0 * t)
    made = {0: [], 1: []}

    def feed(block):
        for piece in receiver.process(block):
            made[piece.place].append(piece.audio)

    def carrier(offset_hz):
        return (0.3 * message * np.exp(2j * np.pi * offset_hz * t)).astype(np.complex64)

    lost = int(0.1 * rate_hz)
    feed(Block(carrier(30e3), 0))
    feed(Block(carrier(10e3), len(t) + lost, lost, centre_hz=1.02e6))
    for piece in receiver.flush():
        made[piece.place].append(piece.audio)
    audio = np.concatenate(made[0], axis=1)[0]
    after = audio[int(2.6 * 12_000) : int(4.0 * 12_000)]
    spectrum = np.abs(np.fft.rfft(after * np.hanning(len(after))))
    assert np.argmax(spectrum[20:]) + 20 == pytest.approx(1000.0 * len(after) / 12_000, abs=1)
    assert len(audio) == (2 * len(t) + lost) // 20
    # The other channel lies outside now: silence, not an error.
    assert np.abs(np.concatenate(made[1], axis=1)[0][int(2.6 * 12_000) :]).max() < 1e-6
    assert receiver.info.centre_hz == 1.02e6


def test_a_gap_that_is_told_in_parts_is_one_gap():
    rate_hz = 48e3
    receiver = Receiver(SourceInfo("receiver", "test", rate_hz, 1e6, None, None), channels("1MHz A3E"))
    iq = np.full(4_800, 0.1, np.complex64)
    nothing = iq[:0]
    receiver.process(Block(iq, 0))
    for k in range(1, 11):
        receiver.process(Block(nothing, 4_800 + 960 * k, 960))
    receiver.process(Block(iq, 14_880, 480))
    receiver.process(Block(iq, 19_680 + 240, 240))
    assert receiver.gaps == 2
    assert receiver.samples_lost == 9_600 + 480 + 240
    assert list(receiver.losses) == [pytest.approx((0.1, 0.21)), pytest.approx((0.41, 0.005))]
