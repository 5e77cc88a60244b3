"""What the whole receiver promises, with every emission at once."""

import hashlib

import numpy as np
import pytest
from scenes import one_of_each, receive, resampled, run_blocks
from signals import fit, hilbert

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.sources.pacing import Paced
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block
from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Scene

RATE_HZ = 288_000.0
CLEAN_DB = -40.0  # audio SNR of at least 40 dB from a clean capture, for every emission
SETTLED_S = 3.5


@pytest.fixture(scope="module")
def clean():
    return receive(Scene(RATE_HZ, 1e6, 7.0, tuple(one_of_each(offset_hz=-37.0)), seed=3))


def left_over_db(audio, rate_hz, truth, k):
    """Power of what is not the message, over the message; phase is free where nothing tells it."""
    message = resampled(truth.messages[k], truth.message_rate_hz, audio.shape[1], rate_hz)
    n = min(len(message), audio.shape[1])
    steady = slice(int(SETTLED_S * rate_hz), n - int(0.3 * rate_hz))
    family = truth.station.emission.family
    known = [message[:n]]
    if family == "J3E":
        known.append(hilbert(message[:n]))
    if family == "A1A":
        t = np.arange(n) / rate_hz
        known = [message[:n] * np.cos(2 * np.pi * 700 * t), message[:n] * np.sin(2 * np.pi * 700 * t)]
    return fit(audio[k, :n][steady].astype(float), *(one[steady] for one in known))


def test_every_message_of_every_emission_is_received_off_tune(clean):
    rendered, receiver, audio = clean
    for place, truth in enumerate(rendered.truths):
        for k in range(len(audio[place])):
            gains, left_db = left_over_db(audio[place], receiver.audio_rate_hz(place), truth, k)
            assert left_db < CLEAN_DB, truth.station.name
            # A followed square may come out upside down; the level is the message's own.
            assert np.hypot(*gains) if len(gains) > 1 else abs(gains[0]) == pytest.approx(1.0, abs=0.02)


def test_audio_is_as_long_as_the_capture_and_on_its_clock(clean):
    rendered, receiver, audio = clean
    for place, channel in enumerate(audio):
        seconds = len(rendered.iq) / RATE_HZ
        assert channel.dtype == np.float32
        assert channel.shape[1] / receiver.audio_rate_hz(place) == pytest.approx(seconds, abs=1e-4)


def test_offsets_are_measured(clean):
    rendered, receiver, _ = clean
    for place, truth in enumerate(rendered.truths):
        offset = receiver.figures(place).carrier_offset_hz
        if truth.station.emission.reference.value == "nominal":
            assert offset is None
        else:
            assert offset is not None
            assert offset.value == pytest.approx(-37.0, abs=0.15)


def test_any_split_gives_the_same_audio_and_figures():
    rng = np.random.default_rng(8)
    scene = Scene(RATE_HZ, 1e6, 2.0, tuple(one_of_each(offset_hz=10.0)), seed=4, noise_dbfs_hz=-100.0)
    rendered, whole, audio = receive(scene)
    info = SourceInfo("recording", "scene", RATE_HZ, 1e6, None, len(rendered.iq))
    split = Receiver(info, whole.channels)
    cuts = np.sort(rng.integers(0, len(rendered.iq), 80))
    starts = [0, *cuts]
    pieces = np.split(rendered.iq, cuts)
    again = run_blocks(split, [Block(piece, int(start)) for piece, start in zip(pieces, starts, strict=True)])
    for one, other in zip(audio, again, strict=True):
        np.testing.assert_array_equal(one, other)
    for place in range(len(audio)):
        assert whole.figures(place) == split.figures(place)


class Recorded:
    """A source of given blocks."""

    def __init__(self, blocks, info):
        self._blocks, self.info = blocks, info

    def blocks(self):
        yield from self._blocks

    def close(self):
        pass


def test_paced_equals_fast_and_waits_for_its_time():
    scene = Scene(96_000.0, 1e6, 1.0, (one_of_each()[0].__class__(**_as_dict(one_of_each()[0], frequency_hz=1e6)),))
    rendered = render(scene)
    info = SourceInfo("recording", "scene", 96_000.0, 1e6, None, len(rendered.iq))
    blocks = [Block(rendered.iq[k : k + 4_800], k) for k in range(0, len(rendered.iq), 4_800)]
    now = [100.0]

    def wait(seconds):
        now[0] += seconds

    paced = Paced(Recorded(blocks, info), lambda: now[0], wait)
    digests = []
    for source in (Recorded(blocks, info), paced):
        receiver = Receiver(info, (channel_from_text("1MHz A3E"),))
        digests.append(hashlib.sha256(run_blocks(receiver, list(source.blocks()))[0].tobytes()).hexdigest())
    assert digests[0] == digests[1]
    assert now[0] - 100.0 == pytest.approx(1.0, abs=0.01)
    assert paced.late_blocks == 0


def _as_dict(station, **changes):
    from dataclasses import fields

    return {field.name: getattr(station, field.name) for field in fields(station)} | changes


def test_a_gap_keeps_the_audio_on_the_clock_and_out_of_the_figures():
    scene = Scene(96_000.0, 1e6, 6.0, (one_of_each()[0].__class__(**_as_dict(one_of_each()[0], frequency_hz=1e6)),),
                  noise_dbfs_hz=-80.0)  # fmt: skip
    rendered = render(scene)
    lost = slice(288_000, 336_000)  # half a second in the middle
    info = SourceInfo("recording", "scene", 96_000.0, 1e6, None, len(rendered.iq))
    texts = ("1MHz A3E agc=off squelch=off",)
    whole = Receiver(info, tuple(map(channel_from_text, texts)))
    audio = run_blocks(whole, [Block(rendered.iq, 0)])[0]
    gapped = Receiver(info, tuple(map(channel_from_text, texts)))
    with_gap = run_blocks(
        gapped, [Block(rendered.iq[: lost.start], 0), Block(rendered.iq[lost.stop :], lost.stop, samples_lost=48_000)]
    )[0]
    assert with_gap.shape == audio.shape
    assert (gapped.gaps, gapped.samples_lost) == (1, 48_000)
    middle = slice(int(3.1 * 12_000), int(3.4 * 12_000))
    assert np.max(np.abs(with_gap[0, middle])) < 1e-6  # silence of the right length
    later = slice(int(4.2 * 12_000), int(5.8 * 12_000))
    assert np.std(with_gap[0, later] - audio[0, later]) < 0.02 * np.std(audio[0, later])
    for name in ("snr_db", "level_dbfs", "carrier_to_noise_density_dbhz"):
        one, other = getattr(whole.figures(0), name), getattr(gapped.figures(0), name)
        assert one.value == pytest.approx(other.value, abs=0.15)
