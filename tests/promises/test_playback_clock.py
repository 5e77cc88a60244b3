"""The playback clock over an hour of virtual time: two clocks that disagree, blocks of any size, a busy machine."""

import numpy as np
import pytest

from rxchain.sinks.playback_clock import PlaybackClock

PIECE_S = 0.01
BLOCK_S = 0.0273  # 65 536 samples at 2.4 MS/s: what a receiver's buffer holds
JITTER_S = 0.004  # a busy machine's: blocks come so much later than they should, at most
LAG_S = 0.080  # how far audio runs behind the stream

# The reserve is found anew each second, within the jitter; what it then does is the loop's transient.
SETTLED_S = 120.0
DELAY_STAYS_S = 0.006  # spread of the delay after settling: the jitter, and the beat of blocks against pieces
SPEED_IS = 1e-4  # of the mean speed over a minute: the delay's wander over that time


class Stream:
    """A receiver whose clock runs fast or slow against the speaker's, and whose blocks come when they come."""

    def __init__(self, error, seed=3, block_s=BLOCK_S):
        self.error, self.block_s = error, block_s
        self.rng = np.random.default_rng(seed)
        self.jitter_s = self.rng.uniform(0.0, JITTER_S, 200_000)

    def newest_s(self, speaker_s):
        """Stream time that has arrived at that moment of the speaker's clock."""
        passed_s = speaker_s * (1 + self.error)
        blocks = int(passed_s / self.block_s)
        late = passed_s - blocks * self.block_s < self.jitter_s[blocks % len(self.jitter_s)]
        return (blocks - late) * self.block_s - LAG_S


def play(stream, seconds, clock):
    """The delay behind the stream at each piece that was played."""
    delay_s, speeds = [], []
    for k in range(int(seconds / PIECE_S)):
        speaker_s = k * PIECE_S
        piece = clock.next(stream.newest_s(speaker_s))
        if piece.start_s is not None:
            delay_s.append(speaker_s * (1 + stream.error) - piece.start_s)
            speeds.append(piece.speed)
    return np.array(delay_s), np.array(speeds)


@pytest.mark.parametrize("error", [-200e-6, 200e-6])
def test_an_hour_of_two_clocks_that_disagree(error):
    clock = PlaybackClock(PIECE_S)
    delay_s, speeds = play(Stream(error), 3600.0, clock)
    assert (clock.underruns, clock.skips) == (0, 0)
    settled = delay_s[int(SETTLED_S / PIECE_S) :]
    assert np.ptp(settled) < DELAY_STAYS_S
    # Without control the hour would end 720 ms away.
    assert abs(settled[-12_000:].mean() - settled[:12_000].mean()) < 1e-3
    assert abs(speeds[-12_000:].mean() - (1 + error)) < SPEED_IS
    assert np.abs(speeds - 1).max() <= 1e-3


def test_a_clock_that_wanders_is_followed():
    class Wandering(Stream):
        def newest_s(self, speaker_s):
            self.error = 200e-6 * np.sin(2 * np.pi * speaker_s / 1800.0)  # warming and cooling
            return super().newest_s(speaker_s)

    clock = PlaybackClock(PIECE_S)
    # The stream's time is the integral of its rate; with a slow sine the product differs only in the size of the wander.
    delay_s, _ = play(Wandering(0.0), 900.0, clock)
    assert (clock.underruns, clock.skips) == (0, 0)
    assert np.ptp(delay_s[int(SETTLED_S / PIECE_S) :]) < 0.03


def test_a_stream_that_stops_and_comes_back_is_one_underrun():
    class Stopping(Stream):
        def newest_s(self, speaker_s):
            return super().newest_s(min(speaker_s, 10.0) if speaker_s < 12.0 else speaker_s)

    clock = PlaybackClock(PIECE_S)
    delay_s, _ = play(Stopping(0.0), 30.0, clock)
    assert clock.underruns == 1
    assert clock.is_playing
    before_s, after_s = delay_s[1000:1800].mean(), delay_s[-1000:].mean()
    assert 0.0 < after_s - before_s < 0.03  # back to the same delay, and a little shyer


def test_what_piles_up_is_skipped_once():
    class Leaping(Stream):
        def newest_s(self, speaker_s):
            return super().newest_s(speaker_s) + (2.0 if speaker_s > 10.0 else 0.0)

    clock = PlaybackClock(PIECE_S)
    stream = Leaping(0.0)
    pieces = [clock.next(stream.newest_s(k * PIECE_S)) for k in range(4000)]
    assert (clock.underruns, clock.skips) == (0, 1)
    lasts = [k for k, piece in enumerate(pieces) if piece.is_last]
    assert len(lasts) == 1  # faded out before the leap
    assert pieces[lasts[0] + 1].start_s - pieces[lasts[0]].start_s > 1.5


def test_the_end_of_a_stream_is_no_underrun():
    clock = PlaybackClock(PIECE_S)
    stream = Stream(0.0)
    for k in range(1000):
        clock.next(stream.newest_s(k * PIECE_S))
    clock.ending = True
    pieces = [clock.next(stream.newest_s(5.0)) for _ in range(100)]
    assert pieces[-1].start_s is None
    assert clock.underruns == 0
