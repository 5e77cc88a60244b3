"""What the speaker plays: pure, continuous, in the right ear, and never louder than the ceiling."""

import numpy as np
import pytest
import scipy.signal

from rxchain.audio.limiter import LOOK_AHEAD_S, Limiter
from rxchain.sinks.hearing import Hearing
from rxchain.sinks.playback import CEILING_DBFS, Playback, Voice

RATE_HZ = 12_000.0
BLOCK_S = 0.024  # a batch of the channel bank
TONE_HZ = 1_000.0
CEILING = 10 ** (CEILING_DBFS / 20)


def tones(amplitudes, seconds, rate_hz=RATE_HZ):
    """One message a row: 1 kHz, 1.3 kHz, 1.6 kHz ..."""
    t = np.arange(int(seconds * rate_hz)) / rate_hz
    frequencies = TONE_HZ + 300.0 * np.arange(len(amplitudes))
    return (np.array(amplitudes)[:, None] * np.sin(2 * np.pi * frequencies[:, None] * t)).astype(np.float32)


def played(playback, sources, seconds, clock_error=0.0, events=()):
    """Feeds the sources (audio, rate) in blocks while the speaker takes 10 ms at a time; what came out."""
    out, sent = [], [0] * len(sources)
    events = dict(events)
    n = round(0.01 * playback.rate_hz)
    for k in range(int(seconds / 0.01)):
        if k in events:
            events[k]()
        blocks = int(k * 0.01 * (1 + clock_error) / BLOCK_S)
        for place, (audio, rate_hz) in enumerate(sources):
            until = int(blocks * BLOCK_S * rate_hz)
            if until > sent[place]:
                playback.write(place, audio[:, sent[place] : until])
                sent[place] = until
        out.append(playback.render(n))
    return np.concatenate(out).T


def make(rates, output_hz, hearing, volume_db=0.0):
    playback = Playback([Voice(rate_hz, messages) for rate_hz, messages in rates], output_hz, hearing)
    playback.volume_db = volume_db
    return playback


def residue_db(audio, rate_hz, lines=(TONE_HZ,)):
    """Power of what is left beside the strongest line near each frequency, against the whole; a click would show."""
    window = scipy.signal.windows.blackmanharris(len(audio))
    power = np.abs(np.fft.rfft(audio * window)) ** 2
    f = np.fft.rfftfreq(len(audio), 1 / rate_hz)
    beside = np.ones(len(f), bool)
    for line_hz in lines:
        beside &= np.abs(f - line_hz) > 20.0  # the window's width, and the speed's wander
    return 10 * np.log10(power[beside].sum() / power.sum())


@pytest.mark.parametrize("output_hz", [8_000.0, 44_100.0, 48_000.0, 96_000.0])
@pytest.mark.parametrize("error", [-200e-6, 200e-6])
def test_a_tone_stays_a_tone_at_any_rate_while_the_clocks_disagree(output_hz, error):
    playback = make([(RATE_HZ, 1)], output_hz, Hearing.solo(0))
    heard = played(playback, [(tones([0.3], 8.0), RATE_HZ)], 7.5, error)
    steady = heard[0, int(2.0 * output_hz) :]
    assert playback.clock.underruns == 0
    assert residue_db(steady, output_hz) < -75.0  # the interpolator's own images are some 90 dB down
    assert np.sqrt(2) * steady.std() == pytest.approx(0.3, rel=0.002)
    np.testing.assert_array_equal(heard[0], heard[1])


def test_channels_of_different_rates_are_heard_at_the_same_instant():
    playback = make([(12_000.0, 1), (48_000.0, 1)], 48_000.0, Hearing((0,), (1,)))
    rng = np.random.default_rng(1)
    slow = np.convolve(rng.standard_normal(48_000), np.hanning(24), "same").astype(np.float32) / 20
    fast = scipy.signal.resample_poly(slow, 4, 1).astype(np.float32)
    heard = played(playback, [(slow[None], 12_000.0), (fast[None], 48_000.0)], 3.0)[:, 48_000:]
    assert np.corrcoef(heard)[0, 1] > 0.999


def test_ears_mix_and_messages():
    rates = [(RATE_HZ, 1), (RATE_HZ, 1), (RATE_HZ, 2)]
    sources = [
        (tones([0.1], 4.0), RATE_HZ),
        (tones([0.0, 0.1], 4.0)[1:], RATE_HZ),
        (tones([0.0, 0.0, 0.1, 0.1], 4.0)[2:], RATE_HZ),
    ]

    def lines(hearing):
        heard = played(make(rates, 48_000.0, hearing), sources, 2.0)[:, 48_000:]
        t = np.arange(heard.shape[1]) / 48_000.0
        probes = np.exp(-2j * np.pi * np.array([1000.0, 1300.0, 1600.0, 1900.0])[:, None] * t)
        return np.round(2 * np.abs(heard @ probes.T) / heard.shape[1], 3).tolist()

    share = round(0.1 / np.sqrt(2), 3)
    assert lines(Hearing.solo(0)) == [[0.1, 0, 0, 0], [0.1, 0, 0, 0]]
    assert lines(Hearing.mix((0, 1))) == [[share, share, 0, 0], [share, share, 0, 0]]
    assert lines(Hearing((0,), (1,))) == [[0.1, 0, 0, 0], [0, 0.1, 0, 0]]
    assert lines(Hearing.solo(2)) == [[0, 0, 0.1, 0], [0, 0, 0, 0.1]]  # a message in each ear
    assert lines(Hearing((0,), (2,))) == [[0.1, 0, 0, 0], [0, 0, 0.05, 0.05]]


@pytest.mark.parametrize("act", ["hear", "mute", "volume", "nothing heard"])
def test_every_change_is_a_ramp_of_at_least_5_ms(act):
    playback = make([(RATE_HZ, 1), (RATE_HZ, 1)], 48_000.0, Hearing.solo(0))

    def change():
        if act == "hear":
            playback.hear(Hearing.solo(1))
        elif act == "mute":
            playback.muted = True
        elif act == "volume":
            playback.volume_db = -40.0
        else:
            playback.hear(Hearing())

    silent = np.zeros((1, 48_000), np.float32)
    heard = played(playback, [(tones([0.4], 4.0), RATE_HZ), (silent, RATE_HZ)], 2.0, events={100: change}.items())[0]
    envelope = np.abs(scipy.signal.hilbert(heard))
    around = envelope[int(0.95 * 48_000) : int(1.3 * 48_000)]
    falling = np.flatnonzero((around < 0.36) & (around > 0.04 if act != "volume" else around > 0.005))
    assert falling[-1] - falling[0] >= 0.6 * 0.005 * 48_000  # from 90 to 10 % of a ramp of 5 ms or more
    assert envelope[int(1.4 * 48_000) : int(1.95 * 48_000)].max() < 0.005
    # A step would spread over all frequencies; this stays below 3 kHz, 60 dB down.
    high = scipy.signal.sosfilt(scipy.signal.butter(8, 3_000, "high", fs=48_000, output="sos"), heard)
    assert np.abs(high[40_000:]).max() < 0.4 * 1e-3


def test_nothing_passes_the_ceiling_and_a_step_of_60_db_does_not_overshoot():
    t = np.arange(int(2.0 * RATE_HZ)) / RATE_HZ
    level = np.where(t < 1.0, 1e-3, 1.0) * (1 + 9 * (t > 1.5))  # 60 dB up, and 20 more
    audio = (level * np.sin(2 * np.pi * TONE_HZ * t)).astype(np.float32)[None]
    heard = played(make([(RATE_HZ, 1)], 48_000.0, Hearing.solo(0)), [(audio, RATE_HZ)], 1.9)
    assert np.abs(heard).max() <= CEILING * 1.0001
    after = np.abs(heard[0])
    steady = after[int(1.4 * 48_000) : int(1.5 * 48_000)].max()
    assert after.max() <= steady * 10 ** (3 / 20)
    assert steady > 0.98 * CEILING


def test_a_mix_of_loud_channels_stays_under_the_ceiling_and_what_is_no_number_is_silent():
    loud = tones([1.0], 2.0)
    bad = loud.copy()
    bad[0, 9_000:9_100] = np.nan
    bad[0, 12_000] = np.inf
    playback = make([(RATE_HZ, 1)] * 3, 44_100.0, Hearing.mix((0, 1, 2)))
    heard = played(playback, [(loud, RATE_HZ), (loud, RATE_HZ), (bad, RATE_HZ)], 1.8)
    assert np.isfinite(heard).all()
    assert np.abs(heard).max() <= CEILING * 1.0001


def test_the_limiter_leaves_what_is_under_the_ceiling_as_it_is():
    limiter = Limiter(1, 2, 48_000.0, CEILING_DBFS, 240)
    audio = (0.4 * np.random.default_rng(2).uniform(-1, 1, (1, 2, 9_600))).astype(np.float32)
    out = np.concatenate([limiter.process(audio), limiter.flush()], axis=2)
    np.testing.assert_allclose(out, audio, rtol=1e-6)
    assert limiter.delay_samples == round(LOOK_AHEAD_S * 48_000) - 1


def test_it_starts_quietly_and_volume_only_lowers():
    playback = Playback([Voice(RATE_HZ, 1)], 48_000.0, Hearing.solo(0))
    heard = played(playback, [(tones([0.5], 3.0), RATE_HZ)], 2.0)
    assert np.abs(heard).max() == pytest.approx(0.05, rel=0.01)  # 20 dB down
    playback = make([(RATE_HZ, 1)], 48_000.0, Hearing.solo(0), volume_db=40.0)
    heard = played(playback, [(tones([0.5], 3.0), RATE_HZ)], 2.0)
    assert np.abs(heard).max() == pytest.approx(0.5, rel=0.01)


def test_hearing_a_channel_that_runs_later_starts_from_where_it_is():
    late = tones([0.0, 0.2], 4.0)[1:]
    playback = make([(RATE_HZ, 1), (RATE_HZ, 1)], 48_000.0, Hearing.solo(0))
    sources = [(tones([0.2], 4.0), RATE_HZ), (late, RATE_HZ / 1.0)]
    # The second channel's audio comes half a second after the first's.
    write = playback.write
    held = []

    def lagging(place, audio):
        if place == 1:
            held.append(audio)
            if len(held) > 20:
                write(1, held.pop(0))
        else:
            write(place, audio)

    playback.write = lagging
    events = {100: lambda: playback.hear(Hearing.solo(1)), 200: lambda: playback.hear(Hearing.solo(0))}
    heard = played(playback, sources, 3.0, events=events.items())[0]
    assert playback.clock.underruns == 0
    envelope = np.abs(scipy.signal.hilbert(heard))
    for change_s in (1.0, 2.0):
        around = envelope[int((change_s + 0.05) * 48_000) : int((change_s + 0.8) * 48_000)]
        assert around.min() > 0.19  # heard again at once, and on
