"""emission=auto: received as what it is found to be, nothing lost, no click, changes noticed."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from scenes import SourceInfo, render, station

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.handover import Handover
from rxchain.chain.receiver import Receiver
from rxchain.cli.main import main
from rxchain.errors import SettingError
from rxchain.sinks.audio_file import AudioFile
from rxchain.sinks.audio_track import AudioTrack
from rxchain.streams import Block
from rxchain.synthesis.messages import Message
from rxchain.synthesis.scene import Scene

RATE_HZ = 96_000.0
SECONDS = 8.0
FIRM_S = 5.0  # by then a name is firm
NOTICED_S = 5.0  # and a change is noticed
VOICES = Path(__file__).parents[2] / "recordings" / "voices"
NAMES = ("A3E", "J3E-LSB", "B8E", "AM-STEREO")
COAST = Path(__file__).parents[2] / "recordings" / "coast.sigmf-meta"


def voiced(name, frequency_hz, **changes):
    voices = sorted(VOICES.glob("*.flac"))
    one = station(name, frequency_hz, **changes)
    return replace(one, messages=tuple(Message("sound", path=voices[2 + k]) for k in range(len(one.messages))))


def heard(scene, texts, rendered, block=12_000, until_s=None):
    info = SourceInfo("recording", "scene", scene.rate_hz, scene.centre_hz, None, len(rendered.iq))
    receiver = Receiver(info, tuple(channel_from_text(text) for text in texts))
    n = len(rendered.iq) if until_s is None else int(until_s * scene.rate_hz)
    iq = rendered.iq[:n]
    pieces = [[] for _ in texts]
    for k in range(0, n, block):
        for audio in receiver.process(Block(iq[k : k + block], k)):
            pieces[audio.place].append(audio.audio)
    return receiver, pieces


@pytest.fixture(scope="module")
def everything():
    stations = tuple(
        voiced(name, 1e6 + (k - 2) * 16_000.0, offset_hz=0.0 if name.startswith("J3E") else 9.0)
        for k, name in enumerate(NAMES)
    )
    scene = Scene(RATE_HZ, 1e6, SECONDS, stations, seed=3, noise_dbfs_hz=-90.0)
    texts = [f"{one.frequency_hz:.1f}Hz auto name={one.name} agc=off squelch=off" for one in stations]
    return scene, texts, render(scene)


def test_each_is_received_as_what_it_is(everything):
    scene, texts, rendered = everything
    receiver, _ = heard(scene, texts, rendered, until_s=FIRM_S + 0.3)
    for place, name in enumerate(NAMES):
        said, given, confidence = receiver.identified(place)
        assert (said, given) == (name, False)
        assert confidence > 0.9
        assert receiver.channels[place].emission.name == name


def test_all_audio_comes_out_whatever_the_blocks(everything):
    scene, texts, rendered = everything
    parts = []
    for block in (12_000, 8_765):
        receiver, pieces = heard(scene, texts, rendered, block)
        for audio in receiver.flush():
            pieces[audio.place].append(audio.audio)
        for place, some in enumerate(pieces):
            assert sum(piece.shape[1] for piece in some) == round(SECONDS * receiver.audio_rate_hz(place))
        parts.append([np.concatenate([piece.mean(axis=0) for piece in some]) for some in pieces])
    for one, other in zip(*parts, strict=True):
        assert np.array_equal(one, other)


def test_the_joint_is_no_click(everything):
    scene, texts, rendered = everything
    _, pieces = heard(scene, texts, rendered)
    for some in pieces:
        audio = np.concatenate([piece[0] for piece in some])
        steps = np.abs(np.diff(audio))
        joints = np.cumsum([piece.shape[1] for piece in some])[:-1]
        at_joints = max(steps[max(0, k - 2) : k + 2].max() for k in joints)
        # No step beside a joint is greater than the programme's own greatest elsewhere.
        assert at_joints <= np.max(np.delete(steps, np.unique([k + d for k in joints for d in (-2, -1, 0, 1)])))


def test_another_station_is_noticed():
    first = voiced("A3E", 1e6, offset_hz=5.0, stop_s=8.0)
    second = replace(voiced("R3E-USB", 1e6, start_s=8.3), name="second")
    scene = Scene(48_000.0, 1e6, 14.0, (first, second), seed=5, noise_dbfs_hz=-90.0)
    rendered = render(scene)
    texts = ["1MHz auto name=x agc=off squelch=off"]
    receiver, _ = heard(scene, texts, rendered, until_s=7.9)
    assert receiver.identified(0)[0] == "A3E"
    receiver, _ = heard(scene, texts, rendered, until_s=8.3 + NOTICED_S)
    assert receiver.identified(0)[0] == "R3E-USB"
    assert receiver.channels[0].emission.name == "R3E-USB"


def test_noise_is_said_to_be_noise():
    scene = Scene(48_000.0, 1e6, 6.0, (), seed=5, noise_dbfs_hz=-90.0)
    receiver, _ = heard(scene, ["1MHz auto name=x"], render(scene))
    assert receiver.identified(0)[0] == "noise only"
    assert receiver.channel_status(0).emission_given is False


def test_gaps_are_bridged_while_identifying(everything):
    scene, texts, rendered = everything
    iq = rendered.iq
    info = SourceInfo("recording", "scene", scene.rate_hz, scene.centre_hz, None, len(iq))
    receiver = Receiver(info, tuple(channel_from_text(text) for text in texts))
    cut, lost = 300_000, 9_600
    audio = receiver.process(Block(iq[:cut], 0))
    audio += receiver.process(Block(iq[cut + lost :], cut + lost, samples_lost=lost)) + receiver.flush()
    for place in range(len(NAMES)):
        samples = sum(one.audio.shape[1] for one in audio if one.place == place)
        assert samples == round(SECONDS * receiver.audio_rate_hz(place))


def test_the_command_writes_names_and_files(tmp_path):
    channels = ["2.721MHz auto name=a", "2.747MHz auto name=b audio=300-2700Hz", "2.76MHz auto name=c audio=300-2000Hz"]
    words = [word for text in channels for word in ("--channel", text)]
    assert main(["receive", str(COAST), *words, "--out", str(tmp_path), "--quiet"]) == 0
    found = {one["name"]: one for one in json.loads((tmp_path / "summary.json").read_text())["channels"]}
    assert [found[name]["emission"] for name in "abc"] == ["A3E", "B8E", "noise only"]
    assert all(one["emission_given"] is False and 0.9 < one["emission_confidence"] <= 1.0 for one in found.values())
    assert found["b"]["audio"]["messages"] == ["upper", "lower"]
    for name, one in found.items():
        audio, rate_hz = soundfile.read(tmp_path / one["audio"]["path"], always_2d=True)
        assert (len(audio) / rate_hz, audio.shape[1]) == (24.0, 2 if name == "b" else 1)


@pytest.mark.parametrize("word", ["detector=envelope", "sideband=upper", "align=+35Hz", "vestige=1kHz", "beat=700Hz"])
def test_what_follows_from_the_emission_is_not_given_with_auto(word):
    with pytest.raises(SettingError, match="name the emission"):
        channel_from_text(f"1MHz auto {word}")


def test_a_handover_joins_two_streams_at_a_sample():
    old, new = np.ones((1, 100), np.float32), np.full((2, 80), 3.0, np.float32)
    handover = Handover(old_index=0, new_index=20, at=50, fade=10)
    pieces = handover.from_old(old[:, :55]) + handover.from_new(new) + handover.from_old(old[:, 55:])
    assert handover.is_over
    assert [len(piece) for piece in pieces] == [1, 2, 2]
    first = np.concatenate([piece[0] for piece in pieces])
    assert len(first) == 100
    assert first[:50] == pytest.approx(1.0)
    assert first[60:] == pytest.approx(3.0)
    assert np.all(np.diff(first[50:60]) > 0)


def test_a_track_whose_messages_grow_goes_on_in_another_file(tmp_path):
    track = AudioTrack(tmp_path, "x", 100.0, lambda path, messages: AudioFile(path, 8_000.0, messages, None))
    one, two = np.full((1, 700), 0.5, np.float32), np.full((2, 300), 0.25, np.float32)
    for audio in (one, two, one):
        track.write(audio)
    files = track.finish()
    for file in files:
        file.close()
    assert [file.path.name for file in files] == ["x.wav", "x-2.wav"]
    assert [file.n_messages for file in files] == [1, 2]
    assert [file.samples for file in files] == [700, 1000]
