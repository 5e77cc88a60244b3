"""``rxchain devices``: what can be used here, what is missing, and the clock learnt from a carrier."""

import json

import numpy as np
import pytest
from test_sound_output import card, needs_library  # noqa: F401
from test_sound_output import run as run_on_card
from test_usb_receiver import library, run  # noqa: F401

from rxchain.cli.main import main
from rxchain.sources.rtlsdr_calibration import strongest_line

RATE_HZ = 1.2e6
COMMAND = """
import io, contextlib
from rxchain.cli.main import main
out, err = io.StringIO(), io.StringIO()
with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
    status = main({arguments!r})
print(json.dumps([status, out.getvalue(), err.getvalue()]))
"""


def test_receivers_are_listed_by_serial_and_index(library):  # noqa: F811
    (status, out, _), _ = run(library, COMMAND.format(arguments=["devices"]), STANDIN_DEVICES="2")
    assert status == 0
    assert "  rtlsdr:00000001  stand-in (index 0)\n  rtlsdr:00000002  stand-in (index 1)\n" in out


def test_what_is_missing_is_said_with_its_cure(library):  # noqa: F811
    body = "sys.modules['rtlsdr'] = sys.modules['sounddevice'] = None\n" + COMMAND.format(
        arguments=["devices", "--json"]
    )
    (status, out, _), _ = run(library, body)
    found = json.loads(out)
    assert status == 0
    assert "pip install 'pyrtlsdr[lib]'" in found["receivers"]["missing"]
    assert "apt install libportaudio2" in found["sound_outputs"]["missing"]
    (_, out, _), _ = run(library, COMMAND.format(arguments=["devices"]), STANDIN_DEVICES="0")
    assert "none: no receiver on USB; plug one in" in out


@needs_library
def test_sound_outputs_are_listed(card):  # noqa: F811
    body = COMMAND.format(arguments=["devices", "--json"])
    _, out, _ = run_on_card(card[0], body)
    (paper,) = (one for one in json.loads(out)["sound_outputs"]["devices"] if one["name"] == "paper")
    assert paper["number"] == 0
    assert paper["channels"] >= 2
    assert paper["rate_hz"] > 0


def carrier_file(path, ppm, amplitude, frequency_hz=100e6, beside_hz=250e3):
    """What a receiver with that clock error delivers of a carrier, noise under it, as bytes."""
    true_rate_hz = RATE_HZ * (1 + ppm * 1e-6)
    offset_hz = frequency_hz - (frequency_hz - beside_hz) * (1 + ppm * 1e-6)
    n = 3_400_000
    phase = np.arange(n) * (offset_hz / true_rate_hz)
    rng = np.random.default_rng(6)
    iq = amplitude * np.exp(2j * np.pi * (phase % 1.0)) + 0.1 * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
    components = np.stack([iq.real, iq.imag], axis=1) * 60 + 127.5
    path.write_bytes(np.clip(np.round(components), 0, 255).astype(np.uint8).tobytes())


@pytest.mark.parametrize("ppm", [-61.3, 0.0, 17.25])
def test_a_clock_error_is_learnt_from_a_carrier(library, tmp_path, ppm):  # noqa: F811
    carrier_file(tmp_path / "carrier", ppm, 0.3)
    arguments = ["devices", "--calibrate", "100MHz", "--json"]
    body = "import rxchain.sources.rtlsdr_receiver as early\nearly._QUEUED_S = 60.0\n" + COMMAND.format(
        arguments=arguments
    )
    (status, out, err), _ = run(library, body, STANDIN_FILE=str(tmp_path / "carrier"))
    assert status == 0, err
    found = json.loads(out)
    # A line of 0.3 in noise of 0.14 over 0.2 s is placed to some 10 mHz; the parabola's own error is under 1 % of a bin.
    assert found["ppm"]["value"] == pytest.approx(ppm, abs=0.002)
    assert found["ppm"]["uncertainty"] < 0.002


def test_no_carrier_is_no_calibration(library, tmp_path):  # noqa: F811
    carrier_file(tmp_path / "noise", 0.0, 0.0)
    body = COMMAND.format(arguments=["devices", "--calibrate", "100MHz"])
    body = "import rxchain.sources.rtlsdr_receiver as early\nearly._QUEUED_S = 60.0\n" + body
    (status, _, err), _ = run(library, body, STANDIN_FILE=str(tmp_path / "noise"))
    assert status == 2
    assert "no carrier stands out there" in err


def test_a_line_is_placed_between_the_bins():
    t = np.arange(4_096) / 48_000.0
    for hz in (5_000.0, 5_003.1, 5_007.9):
        iq = np.exp(2j * np.pi * hz * t).astype(np.complex64)
        offset_hz, snr_db = strongest_line(iq, 48_000.0, 5_000.0, 100.0)
        assert offset_hz == pytest.approx(hz - 5_000.0, abs=0.4)  # the parabola's bias is 3 % of a bin at most
        assert snr_db > 40.0


@pytest.mark.parametrize(
    ("arguments", "rule"),
    [
        (["--calibrate", "100"], "a frequency is a number with its unit"),
        (["--gain", "20"], "is for calibrating"),
        (["--receiver", "1"], "is for calibrating"),
        (["--calibrate", "1MHz", "--gain", "loud"], "must be auto, headroom or a number of dB"),
    ],
)
def test_bad_requests(capsys, arguments, rule):
    assert main(["devices", *arguments]) == 2
    assert rule in capsys.readouterr().err
