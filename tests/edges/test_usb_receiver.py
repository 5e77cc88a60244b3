"""The USB receiver: the real Python binding on a stand-in for its driver library, one process a case."""

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

SOURCE = Path(__file__).parent / "driver_standin" / "standin.c"
BUFFER = 32_768  # bytes: what the receiver asks for at 2.4 MS/s
N_BYTES = 10 * BUFFER + 10_000
DEADLINE_S = 60

# The binding prefers a library that comes with it; that one is hidden, so that ours is found.
PROLOGUE = """
import sys, json, hashlib
sys.modules['pyrtlsdrlib'] = None
import numpy as np
import time
from rxchain.sources.opening import open_source
from rxchain.sources.rtlsdr_driver import ReceiverSettings
from rxchain.sources.rtlsdr_receiver import RtlsdrReceiver
from rxchain.errors import ReceiverError
"""


@pytest.fixture(scope="module")
def library(tmp_path_factory):
    if shutil.which("gcc") is None:
        pytest.skip("needs gcc to build the stand-in for the driver library")
    folder = tmp_path_factory.mktemp("driver")
    subprocess.run(
        ["gcc", "-O2", "-Wall", "-shared", "-fPIC", "-fvisibility=hidden", "-o", folder / "librtlsdr.so", SOURCE],
        check=True,
    )
    rng = np.random.default_rng(1)
    (folder / "bytes").write_bytes(rng.integers(0, 256, N_BYTES, dtype=np.uint8).tobytes())
    return folder


def run(library, body, **environment):
    """Runs code in a process of its own on the stand-in; what it prints as JSON, and the log of settings."""
    log = library / f"log-{abs(hash((body, *sorted(environment.items()))))}"
    env = os.environ | {
        "LD_LIBRARY_PATH": str(library),
        "STANDIN_FILE": str(library / "bytes"),
        "STANDIN_LOG": str(log),
    }
    env |= environment
    done = subprocess.run(
        [sys.executable, "-c", PROLOGUE + body],
        env=env,
        capture_output=True,
        text=True,
        timeout=DEADLINE_S,
        cwd=library,
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout.splitlines()[-1]), log.read_text() if log.exists() else ""


RECEIVE = """
source = RtlsdrReceiver(None, ReceiverSettings(2.4e6, 118.5e6, patience_s=0.0{more}))
samples, lost, overloaded, fault = [], 0, 0, None
try:
    for block in source.blocks():
        samples.append(block.iq); lost += block.samples_lost; overloaded += block.overloaded
except ReceiverError as error:
    fault = type(error).__name__ + ': ' + str(error)
source.close(); source.close()
iq = np.concatenate(samples)
print(json.dumps({{'n': len(iq), 'digest': hashlib.sha256(iq.tobytes()).hexdigest(), 'lost': lost,
                   'overloaded': overloaded, 'fault': fault, 'kind': source.info.kind, 'rate': source.info.sample_rate_hz}}))
"""


def expected_digest(data):
    import hashlib

    components = (np.frombuffer(data, "u1").astype(np.float32) - np.float32(127.5)) * np.float32(1 / 127.5)
    return hashlib.sha256(components.tobytes()).hexdigest()


@pytest.mark.parametrize(("code", "words"), [("-5", "gone"), ("0", "its stream ended")])
def test_unplugged_after_all_samples_were_delivered(library, code, words):
    got, log = run(library, RECEIVE.format(more=""), STANDIN_END=code)
    data = (library / "bytes").read_bytes()
    assert got["n"] == N_BYTES // 2
    assert got["digest"] == expected_digest(data)
    assert (got["lost"], got["kind"], got["rate"]) == (0, "receiver", 2.4e6)
    assert got["overloaded"] == np.sum((np.frombuffer(data, "u1").reshape(-1, 2) % 255 == 0).any(axis=1))
    assert got["fault"].startswith("SourceLost")
    assert words in got["fault"]
    assert "rate 2400000\n" in log
    assert "frequency 118500000\n" in log
    assert "bias 1" not in log  # no voltage on the antenna line unless asked for


def test_settings_reach_the_driver(library):
    more = ", gain_db=28.0, ppm=-3, direct_sampling='q'"
    _, log = run(library, RECEIVE.format(more=more), STANDIN_END="-5")
    for line in ("gain 280", "manual gain 1", "ppm -3", "direct sampling 2"):
        assert f"{line}\n" in log


def test_a_receiver_that_falls_silent_is_lost(library):
    got, _ = run(library, RECEIVE.format(more=""), STANDIN_END="hang")
    assert got["n"] == N_BYTES // 2
    assert "hangs" in got["fault"]


def test_of_a_short_buffer_what_is_missing_is_reported(library):
    got, _ = run(library, RECEIVE.format(more=""), STANDIN_END="-5", STANDIN_SHORT="2")
    assert got["n"] == (N_BYTES - BUFFER // 2) // 2
    assert got["lost"] == BUFFER // 4


def test_a_slow_reader_loses_the_oldest_and_says_how_much(library):
    body = RECEIVE.format(more="").replace(
        "for block in source.blocks():\n",
        "import rxchain.sources.rtlsdr_receiver as module\n"
        "    for block in source.blocks():\n"
        "        if not samples:\n"
        "            source._thread.join(20)\n",  # everything is delivered while the reader holds the first block
    )
    body = "import rxchain.sources.rtlsdr_receiver as early\nearly._QUEUED_S = 0.03\n" + body
    got, _ = run(library, body, STANDIN_END="-5")
    assert got["lost"] > 0
    assert got["n"] + got["lost"] == N_BYTES // 2


FAIL = """
try:
    open_source({name!r}, rate_hz={rate}, centre_hz=118.5e6)
    print(json.dumps('opened'))
except ReceiverError as error:
    print(json.dumps([error.exit_status, str(error)]))
"""


@pytest.mark.parametrize(
    ("name", "rate", "environment", "words"),
    [
        ("rtlsdr", 2.4e6, {"STANDIN_DEVICES": "0"}, "no receiver found on USB"),
        ("rtlsdr:00000009", 2.4e6, {"STANDIN_DEVICES": "2"}, "there are: 00000001, 00000002"),
        ("rtlsdr", 2.4e6, {"STANDIN_OPEN": "-6"}, "could not be opened"),
        ("rtlsdr", 500e3, {}, "samples at 226 to 300 kS/s or 0.9 to 3.2 MS/s"),
    ],
)
def test_receivers_that_cannot_be_used(library, name, rate, environment, words):
    (status, text), _ = run(library, FAIL.format(name=name, rate=rate), **environment)
    assert status == 2
    assert words in text


def test_a_driver_that_is_missing_is_named_with_its_cure(library, tmp_path):
    body = "sys.modules['rtlsdr'] = None\n" + FAIL.format(name="rtlsdr", rate=2.4e6)
    (status, text), _ = run(library, body)
    assert status == 2
    assert "pip install 'pyrtlsdr[lib]'" in text
