"""The long-wave time signal off the air: a real full carrier whose code, offset and levels are known.

Recorded by independent operators in 2017; origin, licence and truth are in the folder's own index. The truth was
decoded by hand and equals the published code for that minute: at each second the carrier drops for 100 ms (0) or 200 ms
(1); at second 59 it does not.
"""

import numpy as np
import pytest
from signals import through

from rxchain.carrier.follower import FollowerSettings, make_follower
from rxchain.carrier.track import Follow, Turned
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.detectors.envelope import EnvelopeDetector, emission_band
from rxchain.kernels.fir import lowpass
from rxchain.sources.opening import open_source
from rxchain.tuning.channel_bank import ChannelBank
from rxchain.tuning.plan import plan_bank

BITS_OF_MINUTE_42 = "00100001001110000010111000"
LAST_BITS_OF_MINUTE_41 = {57: 0, 58: 1}
FIRST_SECOND = 41 * 60 + 56  # of the hour; the recordings begin within the second before it
OFFSET_HZ = {1: 0.012, 2: 0.011, 3: 0.007}
OFFSET_TOLERANCE_HZ = 0.01
DROPPED = 0.1555  # of full: 0.154 to 0.157 in the three
DROPPED_TOLERANCE = 0.01

recordings = pytest.mark.parametrize("number", [1, 2, 3])


def envelope_of(path):
    """The detected envelope, carrier and all, at the channel's rate, and the time of its first sample in the hour."""
    source = open_source(str(path))
    plan = plan_bank(source.info.sample_rate_hz)
    bank = ChannelBank(plan, [(plan.base_bins, np.array([0.0]))])
    channel = np.concatenate([*(bank.process(block.iq)[0] for block in source.blocks()), bank.flush()[0]], axis=1)
    rate_hz = plan.rate_hz(plan.base_bins)
    follower = make_follower(FollowerSettings(Follow.CARRIER), 1, rate_hz)
    parts: list[Turned] = [follower.process(channel), follower.flush()]
    upright = np.concatenate([part.iq for part in parts], axis=1)
    # An audio band that keeps 0 Hz: the message is the carrier's own level.
    level = lowpass(601, 40.0, rate_hz, 60.0)
    detector = EnvelopeDetector([emission_band(-100.0, 100.0, rate_hz)], [level])
    start = source.info.start
    return through(detector, upright)[0, 0], rate_hz, start.minute * 60 + start.second + start.microsecond / 1e6


def second_by_second(envelope, rate_hz, start_s):
    """Of each whole second: mean level from 20 to 80 ms, from 120 to 180 ms, and from 400 to 900 ms."""
    levels = {}
    for second in range(int(np.ceil(start_s)), int(start_s + len(envelope) / rate_hz)):
        first = (second - start_s) * rate_hz
        windows = [(0.03, 0.08), (0.12, 0.18), (0.4, 0.9)]
        levels[second] = [np.median(envelope[int(first + a * rate_hz) : int(first + b * rate_hz)]) for a, b in windows]
    return levels


@recordings
def test_time_code_read_from_the_detected_envelope(shared_recordings, number):
    envelope, rate_hz, start_s = envelope_of(shared_recordings / "offair" / f"dcf77-2017-{number}.sigmf-meta")
    full = np.median(envelope)
    read = {}
    dropped = []
    for second, (early, late, rest) in second_by_second(envelope, rate_hz, start_s).items():
        if early > 0.6 * full:
            read[second] = None
        else:
            read[second] = int(late < 0.6 * full)
            dropped.append(early / rest)
    assert read[42 * 60 - 1] is None  # second 59: no drop
    for second, bit in LAST_BITS_OF_MINUTE_41.items():
        assert read[41 * 60 + second] == bit
    # The last second that lies wholly within the recording.
    complete = [second for second in read if second >= 42 * 60 and second + 0.95 < start_s + len(envelope) / rate_hz]
    wanted = BITS_OF_MINUTE_42[: len(complete)]
    assert len(wanted) >= 24
    assert "".join(str(read[second]) for second in complete[: len(wanted)]) == wanted
    assert np.median(dropped) == pytest.approx(DROPPED, abs=DROPPED_TOLERANCE)


@recordings
def test_carrier_offset(shared_recordings, number):
    source = open_source(str(shared_recordings / "offair" / f"dcf77-2017-{number}.sigmf-meta"))
    receiver = Receiver(source.info, (channel_from_text("77.5kHz A3E"),))
    for block in source.blocks():
        receiver.process(block)
    receiver.flush()
    receiver.measure(overall=True)
    offset = receiver.figures(0).carrier_offset_hz
    assert offset is not None
    assert offset.value == pytest.approx(OFFSET_HZ[number], abs=OFFSET_TOLERANCE_HZ)
    group, row = receiver.group_of(0)
    assert group.locked_fraction(row) > 0.95


def test_a_sound_file_of_many_data_chunks_is_read_whole(shared_recordings):
    """Its 690 chunks hold the samples of the first recording; a reader that takes one for all returns 512."""
    folder = shared_recordings / "offair"
    chunked = open_source(str(folder / "dcf77-2017-1-many-chunks.wav"), centre_hz=77_500.0)
    plain = open_source(str(folder / "dcf77-2017-1.sigmf-meta"))
    assert chunked.info.n_samples == plain.info.n_samples
    np.testing.assert_array_equal(
        np.concatenate([block.iq for block in chunked.blocks()]), np.concatenate([block.iq for block in plain.blocks()])
    )
