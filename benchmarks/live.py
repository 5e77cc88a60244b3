"""A live run end to end with no hardware: USB driver stand-in, 20 channels, sound, dashboard; what is lost, late, spent.

Run: ``python benchmarks/live.py [SECONDS]`` (600 if left out; an eighth as long for each of the other cases). Needs gcc,
PulseAudio (``apt install pulseaudio libasound2-plugins libportaudio2``) and Linux. Writes ``benchmarks/results/live.md``.

The stand-in for the driver library delivers a capture of 2.4 MS/s, over and over, at its pace; the real Python binding,
the command as an operator starts it, a real PortAudio output into a sound server whose sink is a pipe. Once in every pass
of the capture a tone begins in the channel that is heard. The stand-in notes when the buffer with that sample was
delivered, the reader of the pipe when the tone comes out: their difference is the delay, measured outside the program.
"""

from __future__ import annotations

import json
import os
import pty
import select
import shutil
import struct
import subprocess
import sys
import tempfile
import threading
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
RATE_HZ, CENTRE_HZ, PASS_S = 2.4e6, 118.5e6, 5.0
TONE_HZ, TONE_S, SPEAKER_HZ = 1_000.0, 0.4, 48_000
CHANNELS = 20
ENVELOPE_MS, COHERENT_MS = 120, 180

# The command as an operator starts it; the binding's own library is hidden, and every status is noted.
PROGRAM = """
import json, os, sys, time
sys.modules["pyrtlsdrlib"] = None
from rxchain.chain.runner import Runner
from rxchain.cli.main import main
seen, of_runner = [], Runner.status
def noted(self):
    status = of_runner(self)
    seen.append(status)
    return status
Runner.status = noted
arguments, notes = json.loads(sys.argv[1])
started = time.monotonic()
code = main(arguments)
spent = os.times()
last, sound = seen[-1], [one.sound for one in seen if one.sound]
json.dump({"code": code, "elapsed_s": last.elapsed_s, "lost": last.samples_lost, "gaps": last.gaps,
    "late": last.late_blocks, "short": last.short_buffers, "reopened": last.reopened,
    "overruns": sys.modules["rtlsdr"].librtlsdr.standin_overruns() if "rtlsdr" in sys.modules else 0,
    "overload": last.overload_fraction, "cpu_s": spent.user + spent.system, "wall_s": time.monotonic() - started,
    "underruns": sound[-1].underruns if sound else 0, "skips": sound[-1].skips if sound else 0,
    "losses": sound[-1].losses if sound else 0,
    "trouble": sorted({one.sound.trouble for one in seen if one.sound and one.sound.trouble}),
    "delays_s": [one.delay_s for one in sound if one.delay_s is not None],
    "speeds": [one.speed for one in sound]}, open(notes, "w"))
sys.exit(code)
"""


@dataclass
class Heard:
    """What came out of the pipe: when each chunk came (monotonic clock), and its left channel."""

    times_s: list[float] = field(default_factory=list)
    chunks: list[np.ndarray] = field(default_factory=list)

    def onsets_s(self) -> np.ndarray:
        """When the tone was heard to begin: its first 2 ms, by the line at 1 kHz over the moment before."""
        onsets, carry, quiet = [], np.zeros(0), 0
        block = SPEAKER_HZ // 1_000
        probe = np.exp(-2j * np.pi * TONE_HZ * np.arange(block) / SPEAKER_HZ) * 2 / block
        for came_s, chunk in zip(self.times_s, self.chunks, strict=True):
            data = np.concatenate([carry, chunk])
            n = len(data) // block
            carry = data[n * block :]
            for k, line in enumerate(np.abs(data[: n * block].reshape(n, block) @ probe)):
                if line > 0.02 and quiet > 1_000:
                    # A chunk is written when its first sample is due.
                    onsets.append(came_s + (k * block - (len(data) - len(chunk))) / SPEAKER_HZ)
                quiet = 0 if line > 0.01 else quiet + 1
        return np.array(onsets)


def main() -> None:
    """Runs the cases and writes the result."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 600.0
    with tempfile.TemporaryDirectory(prefix="live-") as name:
        folder = Path(name)
        build(folder)
        rows = [
            case(folder, detector, s) for detector, s in (("envelope", seconds), ("coherent", max(30.0, seconds / 8)))
        ]
        file_share = file_run(folder)
    lines = table(rows, file_share)
    print("\n".join(lines))
    (ROOT / "benchmarks" / "results").mkdir(exist_ok=True)
    (ROOT / "benchmarks" / "results" / "live.md").write_text("\n".join(lines) + "\n")


def table(rows: list[dict], file_share: float) -> list[str]:
    """The result in Markdown."""
    lines = [
        "# A live run with no hardware",
        "",
        "`python benchmarks/live.py`: stand-in for the USB driver at 2.4 MS/s, 20 A3E channels (meters, gain control,",
        "squelch, files), one heard through PortAudio into a sound server without a card, dashboard on a terminal of",
        f"100x30. {os.cpu_count()} cores, shared with other work (load average {os.getloadavg()[0]:.0f}); "
        f"the program ran at {priority()}.",
        "",
        "| heard through | seconds | samples lost | buffers late | underruns, skips | delay inside, median (largest) | "
        "delay outside, median (largest) | wanted | CPU |",
        "|---|---|---|---|---|---|---|---|---|",
    ]
    for row in rows:
        inside, outside = 1e3 * np.array(row["delays_s"]), 1e3 * row["outside_s"]
        wanted = ENVELOPE_MS if row["detector"] == "envelope" else COHERENT_MS
        lines.append(
            f"| {row['detector']} | {row['elapsed_s']:.0f} | "
            f"{row['lost']} in {row['gaps']} gaps ({row['overruns']} buffers not fetched) | {row['late']} | "
            f"{row['underruns']}, {row['skips']} | {np.median(inside):.0f} ms ({inside.max():.0f}) | "
            f"{np.median(outside):.0f} ms ({outside.max():.0f}), {len(outside)} tones | {wanted} ms | "
            f"{100 * row['cpu_s'] / row['wall_s']:.0f} % of a core |"
        )
    lines += [
        "",
        f"The same channels from a file, as fast as it goes: {100 * file_share:.0f} % of a core for a second of stream.",
        "Delay inside: what the status says, the longest of each second. Delay outside: from the delivery of the driver's",
        "buffer with a tone's first sample to the tone's coming out of the sound server.",
    ]
    return lines


def priority() -> str:
    """The priority of this process and its children, in words."""
    return "real-time priority" if os.sched_getscheduler(0) else f"nice {os.nice(0)}"


def build(folder: Path) -> None:
    """The stand-in, and the capture it delivers."""
    standin = ROOT / "tests" / "edges" / "driver_standin" / "standin.c"
    subprocess.run(
        ["gcc", "-O2", "-shared", "-fPIC", "-fvisibility=hidden", "-o", folder / "librtlsdr.so", standin], check=True
    )
    n = int(RATE_HZ * PASS_S)
    rng = np.random.default_rng(8)
    iq = (0.02 * rng.standard_normal((n, 2), np.float32)).view(np.complex64)[:, 0]
    t = np.arange(n) / RATE_HZ
    for k, offset_hz in enumerate(offsets_hz()):
        message = np.zeros(n, np.float32)
        if k == 0:
            message[: int(TONE_S * RATE_HZ)] = 0.8 * np.sin(2 * np.pi * TONE_HZ * t[: int(TONE_S * RATE_HZ)])
        else:
            message[:] = 0.6 * np.sin(2 * np.pi * (400.0 + 100.0 * k) * t)
        cycles = np.round(offset_hz * PASS_S) / PASS_S * t  # a whole number in a pass, so that nothing jumps
        iq += (0.025 if k else 0.06) * ((1 + message) * np.exp(2j * np.pi * (cycles % 1.0))).astype(np.complex64)
    components = iq.view(np.float32) * 127.5 + 127.5
    (folder / "capture.cu8").write_bytes(np.clip(np.round(components), 0, 255).astype(np.uint8).tobytes())


def offsets_hz() -> np.ndarray:
    """The channels, about the middle, none on it."""
    return (np.arange(CHANNELS) - CHANNELS / 2 + 0.5) * 75e3


def channel_words(detector: str) -> list[str]:
    """The command's words for the channels; the first is heard."""
    words = []
    for k, offset_hz in enumerate(offsets_hz()):
        more = f" name=heard detector={detector} agc=off squelch=off" if k == 0 else ""
        words += ["--channel", f"{CENTRE_HZ + offset_hz:.0f}Hz A3E{more}"]
    return words


def case(folder: Path, detector: str, seconds: float) -> dict:
    """One run; its notes, and the delays measured outside."""
    marks, notes = folder / f"marks-{detector}", folder / f"notes-{detector}"
    with SoundServer(folder / detector) as server:
        environment = os.environ | server.environment | {
            "LD_LIBRARY_PATH": str(folder), "STANDIN_FILE": str(folder / "capture.cu8"), "STANDIN_PACED": "1",
            "STANDIN_LOOPS": "1", "STANDIN_MARKS": str(marks), "PYTHONPATH": str(ROOT), "TERM": "xterm-256color",
            "OPENBLAS_NUM_THREADS": "1",
        }  # fmt: skip
        arguments = ["receive", "rtlsdr", "--rate", "2.4MHz", "--centre", f"{CENTRE_HZ:.0f}Hz", "--listen", "heard",
                     "--output", "pulse", "--volume", "0", "--out", str(folder / f"out-{detector}")]  # fmt: skip
        arguments += channel_words(detector)
        in_terminal(["-c", PROGRAM, json.dumps([arguments, str(notes)])], environment, seconds)
        onsets_s = server.heard.onsets_s()
    shutil.rmtree(folder / f"out-{detector}")
    row = json.loads(notes.read_text())
    delivered_s = np.array([float(line.split()[0]) for line in marks.read_text().splitlines()])
    delays_s = [onset - delivered_s[delivered_s < onset].max() for onset in onsets_s if (delivered_s < onset).any()]
    # The first tones fall into the start: what is on its way then was not heard from its beginning.
    return row | {"detector": detector, "outside_s": np.array(delays_s[2:])}


def in_terminal(words: list[str], environment: dict[str, str], seconds: float) -> None:
    """Runs Python on a terminal of 100x30 and asks it to end with an interrupt."""
    import fcntl
    import signal
    import termios

    control, terminal = pty.openpty()
    fcntl.ioctl(terminal, termios.TIOCSWINSZ, struct.pack("HHHH", 30, 100, 0, 0))
    with tempfile.TemporaryFile() as errors:
        process = subprocess.Popen(
            [sys.executable, *words], env=environment, stdin=terminal, stdout=terminal, stderr=errors
        )
        os.close(terminal)
        ends_s = time.monotonic() + seconds
        while process.poll() is None:
            if time.monotonic() > ends_s:
                process.send_signal(signal.SIGINT)
                ends_s += 30.0
            if select.select([control], [], [], 0.2)[0]:
                try:
                    os.read(control, 65_536)
                except OSError:
                    break
        process.wait(timeout=30)
        errors.seek(0)
        sys.stderr.write(errors.read().decode(errors="replace"))
    os.close(control)


def file_run(folder: Path) -> float:
    """CPU seconds for a second of the same stream from a file."""
    notes = folder / "notes-file"
    arguments = ["receive", str(folder / "capture.cu8"), "--rate", "2.4MHz", "--centre", f"{CENTRE_HZ:.0f}Hz",
                 *channel_words("envelope"), "--out", str(folder / "out-file")]  # fmt: skip
    environment = os.environ | {"PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"}
    subprocess.run(
        [sys.executable, "-c", PROGRAM, json.dumps([arguments, str(notes)])],
        env=environment, check=True, stdout=subprocess.DEVNULL,
    )  # fmt: skip
    row = json.loads(notes.read_text())
    return row["cpu_s"] / row["elapsed_s"]


class SoundServer:
    """A sound server of its own whose sink is a pipe, paced by the system's clock, and a reader of that pipe."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        (folder / "run").mkdir(parents=True, mode=0o700)
        self.environment = {
            "XDG_RUNTIME_DIR": str(folder / "run"), "HOME": str(folder), "PULSE_SERVER": f"unix:{folder}/run/native",
        }  # fmt: skip
        self.heard = Heard()
        self._ended = threading.Event()

    def __enter__(self) -> SoundServer:
        native, pipe = self._folder / "run" / "native", self._folder / "speaker"
        subprocess.run(
            ["pulseaudio", "-n", "--daemonize=yes", "--exit-idle-time=-1", "--use-pid-file=yes",
             f"--load=module-native-protocol-unix socket={native} auth-anonymous=1",
             f"--load=module-pipe-sink sink_name=speaker file={pipe} format=s16le rate={SPEAKER_HZ} channels=2 "
             "use_system_clock_for_timing=yes"],
            env=os.environ | self.environment, check=True, stderr=subprocess.DEVNULL,
        )  # fmt: skip
        self._thread = threading.Thread(target=self._read, args=(pipe,))
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._ended.set()
        self._thread.join()
        (pid,) = (self._folder / "run" / "pulse").glob("pid")
        os.kill(int(pid.read_text()), 15)

    def _read(self, pipe: Path) -> None:
        descriptor = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
        held = b""
        while not self._ended.is_set():
            if select.select([descriptor], [], [], 0.2)[0]:
                held += os.read(descriptor, 1 << 16)
                frames, held = np.frombuffer(held[: len(held) // 4 * 4], "<i2"), held[len(held) // 4 * 4 :]
                self.heard.times_s.append(time.monotonic())
                self.heard.chunks.append(frames[::2] / 32_768.0)
        os.close(descriptor)


if __name__ == "__main__":
    main()
