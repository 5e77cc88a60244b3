"""Sound through the real library with no sound card, and what an operator sees when the output fails.

The system's sound library can write what is played into a file instead of a card; that is unpaced and exact to the bit.
One process a case, because the library reads its settings once.
"""

import ctypes.util
import json
import os
import subprocess
import sys
import threading
from pathlib import Path

import numpy as np
import pytest

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import ChannelAudio
from rxchain.errors import RequestError, SinkError
from rxchain.sinks.hearing import Hearing
from rxchain.sinks.listening import Listening

DEADLINE_S = 60
SYSTEM_SETTINGS = Path("/usr/share/alsa/alsa.conf")
RATE_HZ = 12_000.0

needs_library = pytest.mark.skipif(
    ctypes.util.find_library("portaudio") is None or not SYSTEM_SETTINGS.exists(),
    reason="needs PortAudio on ALSA (apt install libportaudio2)",
)


@pytest.fixture
def card(tmp_path):
    """Settings of a sound card that writes what it plays into a file."""
    played = tmp_path / "played.raw"
    (tmp_path / "asound.conf").write_text(
        f'<{SYSTEM_SETTINGS}>\npcm.paper {{ type file slave.pcm "null" file "{played}" format "raw" hint {{ show on }} }}\n'
    )
    return tmp_path, played


def run(folder, body):
    done = subprocess.run(
        [sys.executable, "-c", "import json\nimport numpy as np\n" + body],
        env=os.environ | {"ALSA_CONFIG_PATH": str(folder / "asound.conf")},
        capture_output=True,
        text=True,
        timeout=DEADLINE_S,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""  # the library's own remarks are kept off the terminal
    return json.loads(done.stdout.splitlines()[-1])


@needs_library
def test_what_is_written_is_what_the_card_gets(card):
    folder, played = card
    sent = run(
        folder,
        """
from rxchain.sinks.sound_output import SoundOutput, find_output
output = SoundOutput(find_output("paper"))
rng = np.random.default_rng(4)
frames = rng.uniform(-0.5, 0.5, (4800, 2)).astype(np.float32)
for piece in np.split(frames, 10):
    output.write(piece)
output.write(np.zeros((20_000, 2), np.float32))
output.close()
print(json.dumps(frames.tolist()))
""",
    )
    got = np.frombuffer(played.read_bytes(), np.float32).reshape(-1, 2)
    sent = np.array(sent, np.float32)
    start = np.flatnonzero(got.any(axis=1))[0]
    np.testing.assert_array_equal(got[start : start + len(sent)], sent)


@needs_library
def test_a_channel_is_heard_as_it_was_received(card):
    """The whole way: playback into the real library, and the file against the audio by correlation."""
    folder, played = card
    rate_hz = run(
        folder,
        """
from rxchain.sinks.sound_output import SoundOutput, find_output
from rxchain.sinks.playback import Playback, Voice
from rxchain.sinks.hearing import Hearing
output = SoundOutput(find_output("paper"))
playback = Playback([Voice(12_000.0, 1)], output.rate_hz, Hearing.solo(0))
playback.volume_db = 0.0
t = np.arange(24_000) / 12_000.0
audio = (0.3 * np.sin(2 * np.pi * (300.0 + 500.0 * t) * t)).astype(np.float32)[None]
for k in range(200):
    if k % 2 == 0:
        playback.write(0, audio[:, k * 120 : k * 120 + 240])
    output.write(playback.render(round(0.01 * output.rate_hz)))
output.close()
print(output.rate_hz)
""",
    )
    got = np.frombuffer(played.read_bytes(), np.float32).reshape(-1, 2)[:, 0].astype(float)
    t = np.arange(int(2.0 * rate_hz)) / rate_hz
    wanted = 0.3 * np.sin(2 * np.pi * (300.0 + 500.0 * t) * t)
    middle = wanted[int(0.5 * rate_hz) : int(1.5 * rate_hz)]
    lags = np.arange(len(got) - len(middle))
    spectrum = np.fft.rfft(got, 2**18) * np.conj(np.fft.rfft(middle, 2**18))
    at = int(np.argmax(np.fft.irfft(spectrum)[: len(lags)]))
    found = got[at : at + len(middle)]
    # A fraction of a sample remains between the two, and the speed is on its way to 1 within a thousandth.
    assert np.corrcoef(found, middle)[0, 1] > 0.98
    assert np.abs(found).max() == pytest.approx(0.3, rel=0.01)


@needs_library
@pytest.mark.parametrize(
    ("wanted", "words"), [("nosuch", "no sound output of this number or name; there are: 0 (paper)"), ("pap", "ok")]
)
def test_an_output_is_found_by_part_of_its_name(card, wanted, words):
    body = f"""
from rxchain.sinks.sound_output import find_output
from rxchain.errors import RequestError
try:
    print(json.dumps("ok " + find_output({wanted!r}).name))
except RequestError as error:
    print(json.dumps(str(error)))
"""
    assert words in run(card[0], body)


@needs_library
def test_receive_listens_at_its_own_pace_and_a_quiet_run_leaves_only_the_sound(card, tmp_path):
    folder, played = card
    t = np.arange(72_000) / 48_000.0
    iq = 0.3 * (1 + 0.8 * np.cos(2 * np.pi * 1000.0 * t))
    (tmp_path / "one.cf32").write_bytes(iq.astype("<c8").tobytes())
    body = f"""
import time
from rxchain.cli.main import main
started = time.monotonic()
status = main(["receive", {str(tmp_path / "one.cf32")!r}, "--rate", "48kHz", "--centre", "1MHz", "--quiet",
               "--channel", "1MHz A3E name=one squelch=off agc=off", "--listen", "one", "--output", "paper", "--volume", "0"])
print(json.dumps([status, time.monotonic() - started]))
"""
    status, seconds = run(folder, body)
    assert status == 0
    assert seconds > 1.5  # no faster than the recording
    got = np.frombuffer(played.read_bytes(), np.float32).reshape(-1, 2)[:, 0]
    rate_hz = 44_100.0  # what the library takes for such a card's own
    heard = np.flatnonzero(np.abs(got) > 0.05)
    steady = got[heard[-1] - 22_050 : heard[-1] - 2_000]
    spectrum = np.abs(np.fft.rfft(steady * np.hanning(len(steady))))
    assert np.argmax(spectrum) * rate_hz / len(steady) == pytest.approx(1000.0, abs=4.0)
    assert 0.5 < (heard[-1] - heard[0]) / rate_hz < 1.7


def test_a_missing_library_is_named_with_its_cure(tmp_path):
    body = """
import sys
sys.modules["sounddevice"] = None
from rxchain.sinks.sound_output import find_output
from rxchain.errors import RequestError
try:
    find_output(None)
except RequestError as error:
    print(json.dumps(str(error)))
"""
    text = run(tmp_path, body)
    assert "apt install libportaudio2" in text
    assert "pip install sounddevice" in text


class FakeReceiver:
    """A receiver's names and rates."""

    def __init__(self):
        self.channels = (channel_from_text("1MHz A3E name=one"), channel_from_text("2MHz A3E name=two"))
        self.elapsed_s = 0.0

    def audio_rate_hz(self, _place):
        return RATE_HZ


class Bench:
    """Outputs, a receiver and a clock that move together: every write of an output moves the time on by its length."""

    def __init__(self):
        self.now_s, self.receiver = 0.0, FakeReceiver()
        self.listening = None
        self.there = True
        self.opened = 0
        self.rate_hz = 48_000.0
        self.frames = []
        self.reached = threading.Event()
        self.until = 0
        self.sent = 0

    def open(self):
        if not self.there:
            raise SinkError("output=bench: not there")
        self.opened += 1
        return BenchOutput(self)


class BenchOutput:
    name, latency_s = "bench", 0.02

    def __init__(self, bench):
        self.bench, self.rate_hz = bench, bench.rate_hz

    def write(self, frames):
        bench = self.bench
        if not bench.there:
            raise SinkError("output=bench: unplugged")
        bench.frames.append(frames)
        bench.now_s += len(frames) / self.rate_hz
        until = int(bench.now_s / 0.02) * 240
        if bench.listening is not None and until > bench.sent:
            for place, hz in ((0, 600.0), (1, 900.0)):
                t = np.arange(bench.sent, until) / RATE_HZ
                bench.listening.write(ChannelAudio(place, (0.3 * np.sin(2 * np.pi * hz * t))[None].astype(np.float32)))
            bench.sent = until
            bench.receiver.elapsed_s = until / RATE_HZ
        if len(bench.frames) >= bench.until:
            bench.reached.set()
        return False

    def close(self):
        pass


def listen(bench, **more):
    bench.listening = Listening(bench.receiver, Hearing.solo(0), bench.open, lambda: bench.now_s, **more)


def after(bench, blocks):
    """Waits until the output has taken so many more blocks."""
    bench.until = len(bench.frames) + blocks
    bench.reached.clear()
    assert bench.reached.wait(DEADLINE_S)


def strongest_hz(frames, rate_hz):
    audio = np.concatenate(frames)[:, 0]
    return np.argmax(np.abs(np.fft.rfft(audio))) * rate_hz / len(audio)


def test_an_output_that_goes_and_comes_back_is_said_counted_and_used_again(monkeypatch):
    monkeypatch.setattr("rxchain.sinks.listening._FIRST_WAIT_S", 0.001)
    monkeypatch.setattr("rxchain.sinks.listening._LONGEST_WAIT_S", 0.002)
    bench = Bench()
    listen(bench, volume_db=0.0)
    after(bench, 200)
    status = bench.listening.status()
    assert (status.trouble, status.losses, status.heard, status.output) == (None, 0, "one", "bench")
    assert 0.0 < status.delay_s < 0.25  # blocks of 20 ms, and a start that has not settled
    bench.there = False
    while bench.listening.status().trouble is None:
        pass
    assert "bench" in bench.listening.status().trouble
    assert bench.listening.status().losses == 1
    bench.rate_hz = 44_100.0  # another output, at another rate
    bench.frames.clear()
    bench.there = True
    after(bench, 200)
    assert bench.listening.status().trouble is None
    assert bench.opened == 2
    assert abs(strongest_hz(bench.frames[100:200], 44_100.0) - 600.0) < 3.0
    bench.listening.close()


def test_what_is_heard_can_be_changed_while_it_plays():
    bench = Bench()
    listen(bench, volume_db=0.0)
    after(bench, 150)
    bench.listening.hear(Hearing.solo(1))
    after(bench, 150)
    assert bench.listening.status().heard == "two"
    assert abs(strongest_hz(bench.frames[-100:], 48_000.0) - 900.0) < 3.0
    bench.listening.set_muted(True)
    after(bench, 150)
    assert not np.concatenate(bench.frames[-50:]).any()
    assert bench.listening.status().muted
    bench.listening.close()


def test_an_output_that_takes_nothing_any_more_is_said():
    bench = Bench()
    listen(bench)
    after(bench, 20)
    frozen = threading.Event()
    write = BenchOutput.write
    waiting = threading.Event()

    def stuck(self, frames):
        waiting.set()
        frozen.wait(DEADLINE_S)
        return write(self, frames)

    try:
        BenchOutput.write = stuck
        assert waiting.wait(DEADLINE_S)
        bench.now_s += 3.0
        assert bench.listening.status().trouble == "the output takes nothing any more"
    finally:
        BenchOutput.write = write
        frozen.set()
    bench.listening.close()


def test_an_output_that_is_not_there_is_a_bad_request():
    bench = Bench()
    bench.there = False
    with pytest.raises((RequestError, SinkError)):
        listen(bench)
