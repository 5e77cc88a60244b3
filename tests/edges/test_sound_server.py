"""Sound in real time: a sound server of the tests' own whose sink is a pipe, stopped and started again."""

import ctypes.util
import os
import select
import shutil
import subprocess
import sys
import threading
import time

import numpy as np
import pytest

RATE_HZ = 48_000
DEADLINE_S = 20.0

pytestmark = pytest.mark.skipif(
    shutil.which("pulseaudio") is None or ctypes.util.find_library("portaudio") is None,
    reason="needs PulseAudio and PortAudio (apt install pulseaudio libasound2-plugins libportaudio2)",
)

# A channel with a tone, as a receiver would deliver it, by the wall clock; its status on a line of its own.
PROGRAM = """
import json, sys, time
import numpy as np
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import ChannelAudio
from rxchain.sinks.hearing import Hearing
from rxchain.sinks.listening import Listening
from rxchain.sinks.sound_output import SoundOutput, find_output, look_again
class Receiver:
    channels, elapsed_s = (channel_from_text("1MHz A3E name=one"),), 0.0
    def audio_rate_hz(self, place):
        return 12_000.0
opened = []
def reopen():
    if opened:
        look_again()
    opened.append(SoundOutput(find_output("pulse")))
    return opened[-1]
receiver = Receiver()
listening = Listening(receiver, Hearing.solo(0), reopen, time.monotonic, 0.0)
started, sent = time.monotonic(), 0
while True:
    until = int((time.monotonic() - started) * 12_000)
    t = np.arange(sent, until) / 12_000.0
    listening.write(ChannelAudio(0, (0.3 * np.sin(2 * np.pi * 1000.0 * t))[None].astype(np.float32)))
    sent, receiver.elapsed_s = until, until / 12_000.0
    status = listening.status()
    print(json.dumps([status.losses, status.trouble, status.delay_s]), flush=True)
    time.sleep(0.02)
"""


class Server:
    """The sound server, and all that was played."""

    def __init__(self, folder):
        self.folder = folder
        (folder / "run").mkdir(mode=0o700)
        self.environment = os.environ | {
            "XDG_RUNTIME_DIR": str(folder / "run"),
            "HOME": str(folder),
            "PULSE_SERVER": f"unix:{folder}/run/native",
        }
        self.played = np.zeros(0)
        self.ended = threading.Event()

    def start(self):
        pipe = self.folder / "speaker"
        subprocess.run(
            [
                "pulseaudio", "-n", "--daemonize=yes", "--exit-idle-time=-1", "--use-pid-file=yes",
                f"--load=module-native-protocol-unix socket={self.folder}/run/native auth-anonymous=1",
                f"--load=module-pipe-sink sink_name=speaker file={pipe} format=s16le rate={RATE_HZ} channels=2 "
                "use_system_clock_for_timing=yes",
            ],
            env=self.environment, check=True, stderr=subprocess.DEVNULL,
        )  # fmt: skip
        self.ended = threading.Event()
        self.reader = threading.Thread(target=self.read, args=(pipe, self.ended))
        self.reader.start()

    def stop(self):
        self.ended.set()
        self.reader.join()
        pid = int((self.folder / "run" / "pulse" / "pid").read_text())
        os.kill(pid, 15)
        wait_for(lambda: not os.path.exists(f"/proc/{pid}/exe") or is_zombie(pid))

    def read(self, pipe, ended):
        descriptor = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
        held = b""
        while not ended.is_set():
            if select.select([descriptor], [], [], 0.05)[0]:
                held += os.read(descriptor, 1 << 16)
                whole = len(held) // 4 * 4
                frames, held = np.frombuffer(held[:whole], "<i2"), held[whole:]
                self.played = np.concatenate([self.played, frames[::2] / 32_768.0])
        os.close(descriptor)


def is_zombie(pid):
    with open(f"/proc/{pid}/stat") as file:
        return file.read().rsplit(")", 1)[1].split()[0] == "Z"


def wait_for(condition):
    ends = time.monotonic() + DEADLINE_S
    while not condition():
        assert time.monotonic() < ends, "it did not come in time"
        threading.Event().wait(0.02)


def test_a_sound_server_that_dies_and_comes_back(tmp_path):
    server = Server(tmp_path)
    server.start()
    program = subprocess.Popen(
        [sys.executable, "-c", PROGRAM], env=server.environment, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL
    )
    collected = []

    def collect():
        for line in program.stdout:
            collected.append(line)

    listener = threading.Thread(target=collect)
    listener.start()
    try:
        wait_for(lambda: np.abs(server.played[-4_800:]).max(initial=0.0) > 0.25)
        wait_for(lambda: len(server.played) > 2 * RATE_HZ)
        steady = server.played[-RATE_HZ // 4 :]
        spectrum = np.abs(np.fft.rfft(steady * np.hanning(len(steady))))
        assert np.argmax(spectrum) * RATE_HZ / len(steady) == pytest.approx(1000.0, abs=5.0)
        server.stop()
        wait_for(lambda: b"output=pulse" in collected[-1])  # said, and counted
        assert not collected[-1].startswith(b"[0,")
        server.played = np.zeros(0)
        server.start()
        wait_for(lambda: np.abs(server.played[-4_800:]).max(initial=0.0) > 0.25)  # heard again
        wait_for(lambda: b"null" in collected[-1])
    finally:
        program.kill()
        program.wait()
        listener.join()
        program.stdout.close()
        server.stop()
