"""The dashboard's keys, from what a terminal sends to what becomes of the channel, the sound and the log."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from scenes import SourceInfo, render, station

from rxchain.chain import alterations
from rxchain.chain.channel_settings import AUTO, OFF, channel_from_text
from rxchain.chain.commands import Commands
from rxchain.chain.grouping import kind_of
from rxchain.chain.receiver import Receiver
from rxchain.cli.operator import Operator
from rxchain.dashboard.keys import DOWN, LEFT, PAGE_DOWN, PAGE_UP, RIGHT, UP, Keyboard
from rxchain.dashboard.operations import NoOperations
from rxchain.emissions import EMISSIONS
from rxchain.streams import Block
from rxchain.synthesis.scene import Scene
from rxchain.tuning.plan import plan_bank

RATE_HZ = 48_000.0
PLAN = plan_bank(2.4e6)


class Wishes(NoOperations):
    """Remembers what was asked for."""

    def __init__(self):
        self.asked = []

    def tune(self, place, by_hz):
        self.asked.append(("tune", place, by_hz))

    def alter(self, place, what):
        self.asked.append(("alter", place, what))

    def hear(self, place):
        self.asked.append(("hear", place))

    def mute(self):
        self.asked.append(("mute",))

    def louder(self, by_db):
        self.asked.append(("louder", by_db))

    def word(self, place, text):
        self.asked.append(("word", place, text))


def pressed(keys, n_channels=20, **state):
    wishes, stopped = Wishes(), []
    keyboard = Keyboard(wishes, **state)
    keyboard.obey(keys, lambda: stopped.append(True), n_channels)
    return keyboard, wishes.asked, bool(stopped)


def test_keys_choose_a_channel_and_stop():
    assert pressed(DOWN + DOWN + UP + PAGE_DOWN)[0].selected == 11
    assert pressed(PAGE_UP, selected=4)[0].selected == 0
    assert pressed(DOWN, n_channels=3, selected=2)[0].selected == 2
    assert pressed("q")[2] is True
    assert pressed("x")[2] is False


def test_each_key_asks_for_one_thing():
    assert pressed(RIGHT + LEFT, selected=3)[1] == [("tune", 3, 10.0), ("tune", 3, -10.0)]
    assert pressed("t" + RIGHT)[1] == [("tune", 0, 100.0)]
    assert pressed("tttt")[0].step_hz == 10.0
    whats = ["emission", "emission back", "detector", "sideband", "band", "squelch", "notch"]
    assert pressed("eEdsbon")[1] == [("alter", 0, what) for what in whats]
    assert pressed("m+-")[1] == [("mute",), ("louder", 2.0), ("louder", -2.0)]
    assert pressed("f")[0].is_frozen is True
    assert pressed("ff")[0].is_frozen is False


def test_what_is_heard_follows_the_choice_once_asked():
    assert pressed(DOWN)[1] == []
    assert pressed("h" + DOWN + DOWN)[1] == [("hear", 0), ("hear", 1), ("hear", 2)]


def test_a_word_is_typed_mended_and_entered_or_given_up():
    keyboard, asked, stopped = pressed("wquay\x7fy 3\r", selected=2)
    assert asked == [("word", 2, "quay 3")]
    assert keyboard.typed is None
    assert stopped is False  # q was a letter
    assert pressed("wabc\x1b")[1] == []
    assert pressed("w  \r")[1] == []


def test_help_goes_with_any_key_and_that_key_does_nothing_else():
    keyboard, asked, stopped = pressed("?q")
    assert (keyboard.shows_help, asked, stopped) == (False, [], False)


@cache
def scene():
    stations = (station("A3E", 1e6 - 8e3, offset_hz=3.0), station("J3E-USB", 1e6 + 6e3))
    return render(Scene(RATE_HZ, 1e6, 8.0, stations, seed=9, noise_dbfs_hz=-90.0))


def started():
    rendered = scene()
    info = SourceInfo("recording", "scene", RATE_HZ, 1e6, None, len(rendered.iq))
    texts = ("992kHz A3E name=one agc=off squelch=off", "1.006MHz J3E-USB name=two agc=off squelch=off")
    return rendered, Receiver(info, tuple(channel_from_text(text) for text in texts))


def run(receiver, rendered, commands, at):
    """Receives the scene; ``at`` : wishes by block number. Returns the audio pieces of each channel."""
    pieces = [[], []]
    for number, k in enumerate(range(0, len(rendered.iq), 4_800)):
        for wish in at.get(number, ()):
            wish()
        commands.run_all()
        for audio in receiver.process(Block(rendered.iq[k : k + 4_800], k)):
            pieces[audio.place].append(audio.audio)
    for audio in receiver.flush():
        pieces[audio.place].append(audio.audio)
    return pieces


def test_wishes_change_the_channel_on_the_clock_and_without_a_click():
    rendered, receiver = started()
    commands = Commands()
    operator = Operator(commands, receiver, None, None)
    pieces = run(
        receiver,
        rendered,
        commands,
        {
            20: [lambda: operator.tune(0, 10.0)],
            22: [lambda: operator.tune(0, 10.0), lambda: operator.tune(0, -10.0)],
            40: [lambda: operator.alter(0, "detector")],
            60: [lambda: operator.alter(1, "sideband")],
        },
    )
    assert receiver.channels[0].frequency_hz == 992_010.0
    assert receiver.channels[0].detector == "envelope"
    assert receiver.channels[1].emission.name == "J3E-LSB"
    assert [sum(piece.shape[1] for piece in some) for some in pieces] == [96_000, 96_000]
    audio = np.concatenate([piece[0] for piece in pieces[0]])
    steps = np.abs(np.diff(audio[24_000:]))
    assert steps.max() < 3.0 * np.quantile(steps, 0.999)
    assert commands.said.startswith("two: J3E-LSB")


def test_what_cannot_be_is_said_and_changes_nothing():
    rendered, receiver = started()
    commands = Commands()
    operator = Operator(commands, receiver, None, None)
    before = receiver.channels[1]
    run(receiver, rendered, commands, {3: [lambda: operator.tune(1, 1e6)]})
    assert "the capture reaches from" in commands.said
    assert receiver.channels[1] == before
    operator.hear(0)
    assert "start with --listen" in operator.said
    operator.word(0, "hello")
    commands.run_all()
    assert "no logbook" in operator.said


def test_the_sound_obeys():
    class Sound:
        volume_db, muted, heard = -20.0, False, None

        def status(self):
            return self

        def hear(self, hearing):
            self.heard = hearing.places

        def set_muted(self, muted):
            self.muted = muted

        def set_volume_db(self, volume_db):
            self.volume_db = volume_db

    _, receiver = started()
    sound = Sound()
    operator = Operator(Commands(), receiver, sound, None)
    operator.hear(1)
    operator.mute()
    operator.louder(2.0)
    assert (sound.heard, sound.muted, sound.volume_db) == ((1,), True, -18.0)
    assert operator.said == "volume -18 dB"


@pytest.mark.parametrize("name", list(EMISSIONS))
def test_every_step_from_every_emission_is_a_channel_that_can_be_received(name):
    """Whatever key comes next: the settings pass the rules of their own words, and a group can be made of them."""
    start = channel_from_text(f"1MHz {name} name=x")
    steps = (
        alterations.next_emission,
        alterations.next_detector,
        alterations.next_sideband,
        alterations.next_band,
        alterations.next_squelch,
        alterations.next_notch,
        lambda channel: alterations.next_emission(channel, -1),
    )
    for one in steps:
        for other in steps:
            channel = other(one(start))
            assert channel.detector == AUTO or channel.detector in channel.emission.detectors
            assert channel.sideband == "both" or channel.emission.is_double_sideband
            assert channel.notch_hz == OFF or channel.emission.family != "A1A"
            assert kind_of(channel, PLAN).bins


def test_steps_come_round():
    channel = channel_from_text("1MHz A3E name=x")
    assert alterations.next_emission(alterations.next_emission(channel), -1).emission is channel.emission
    for step, n in ((alterations.next_detector, 4), (alterations.next_sideband, 5), (alterations.next_squelch, 4)):
        turned = channel
        for _ in range(n):
            turned = step(turned)
        assert turned == channel
    logged = channel_from_text("1MHz A3E name=x log=transmissions")
    assert OFF not in {alterations.next_squelch(replace(logged, squelch_db=db)).squelch_db for db in (AUTO, 6.0, 12.0)}
