"""Requests that cannot be served: one line that says what, where and what would do; exit 2; nothing written."""

import json
import subprocess
import sys

import numpy as np
import pytest

from rxchain.cli.main import main


@pytest.fixture(scope="module")
def recording(tmp_path_factory):
    """Half a second of one carrier on 1 MHz."""
    folder = tmp_path_factory.mktemp("recording")
    iq = 0.5 * np.exp(2j * np.pi * 100.0 * np.arange(24_000) / 48_000.0)
    (folder / "one.cf32").write_bytes(iq.astype("<c8").tobytes())
    meta = {
        "global": {"core:datatype": "cf32_le", "core:sample_rate": 48_000.0, "core:version": "1.0.0"},
        "captures": [{"core:sample_start": 0, "core:frequency": 1e6}],
        "annotations": [],
    }
    (folder / "one.sigmf-data").write_bytes(iq.astype("<c8").tobytes())
    (folder / "one.sigmf-meta").write_text(json.dumps(meta))
    return folder / "one.sigmf-meta"


BAD_CHANNELS = {
    "": "a channel is FREQUENCY EMISSION",
    "1MHz": "a channel is FREQUENCY EMISSION",
    "1MHz FM": "not an emission known here",
    "1 A3E": "a frequency is a number with its unit",
    "nanMHz A3E": "a frequency is a number with its unit",
    "2MHz A3E": "the capture reaches from 976kHz to 1.024MHz",
    "1MHz A3E audio=2700-300Hz": "the lower edge must lie under the upper",
    "1MHz A3E audio=1-3000Hz": "at least 20 Hz",
    "1MHz A3E audio=100-90000Hz": "the upper edge must be at most",
    "1MHz A3E detector=magic": "one of auto, envelope, rectifier, coherent",
    "1MHz J3E-USB detector=envelope": "cannot serve J3E-USB",
    "1MHz J3E-USB sideband=upper": "has no choice of sidebands",
    "1MHz A3E sideband=upper detector=envelope": "needs the coherent detector",
    "1MHz A3E vestige=1kHz": "has no vestige",
    "1MHz C3E-USB vestige=9kHz": "must lie between",
    "1MHz C3E-USB slope=steep": "one of sent, received",
    "1MHz C3E-USB transmit_response=nowhere.txt": "a text file of lines",
    "1MHz A1A beat=9kHz": "must lie between 100 Hz and 3 kHz",
    "1MHz A3E beat=700Hz": "has no beat note",
    "1MHz A3E align=+35Hz": "is not tuned by hand",
    "1MHz J3E-USB align=35Hz": "a shift with its sign",
    "1MHz A3E name=../x": "a name is up to 64 letters",
    "1MHz A3E name=.hidden": "a name is up to 64 letters",
    "1MHz A3E agc=loud": "auto, off, or a level in dB",
    "1MHz A3E squelch=7": "auto, off, or a level in dB",
    "1MHz A3E notch=9kHz": "must lie within the message",
    "1MHz A3E blanker=1dB": "between 6dB and 60dB",
    "1MHz J3E-USB deemphasis=nrsc": "is for broadcasts",
    "1MHz A3E colour=red": "not a key of a channel",
    "1MHz A3E name=a name=b": "name is given twice",
    "1MHz A3E rubbish": "is not key=value",
}


def refused(capsys, arguments):
    """Runs a command that must be refused; its one line."""
    status = main(arguments)
    output = capsys.readouterr()
    assert status == 2
    assert output.err.count("\n") == 1
    assert "Traceback" not in output.err
    return output.err


@pytest.mark.parametrize("text", BAD_CHANNELS)
def test_bad_channels(capsys, recording, tmp_path, text):
    out = tmp_path / "out"
    line = refused(capsys, ["receive", str(recording), "--channel", text, "--out", str(out)])
    assert BAD_CHANNELS[text] in line
    assert not out.exists()


def test_two_channels_of_one_name(capsys, recording):
    line = refused(capsys, ["receive", str(recording), "--channel", "1MHz A3E name=x", "--channel", "1MHz A3E name=X"])
    assert "two channels of one run have this name" in line


def test_no_channel_at_all(capsys, recording):
    assert "there is nothing to receive" in refused(capsys, ["receive", str(recording)])


@pytest.mark.parametrize(
    ("source", "rule"),
    [
        ("nowhere.sigmf-meta", "no such file"),
        ("nowhere.wav", "does not tell its centre"),
        ("nowhere.cu8", "a raw file does not tell its rate"),
        ("picture.png", "not a source known here"),
        ("nowhere.toml", "no such file"),
        (".", "not a source known here"),
    ],
)
def test_bad_sources(capsys, source, rule):
    assert rule in refused(capsys, ["receive", source, "--channel", "1MHz A3E"])


@pytest.mark.parametrize(
    ("options", "rule"),
    [
        (["--rate", "48"], "a frequency is a number with its unit"),
        (["--rate", "48kHz"], "a SigMF recording tells its own"),
        (["--capture", "x"], "must be a whole number"),
        (["--capture", "7"], "has captures 0 to 0"),
        (["--gain", "20"], "is for receivers"),
        (["--volume", "-6"], "is for listening; add --listen"),
        (["--output", "1"], "is for listening; add --listen"),
        (["--listen", "--pace", "fast"], "goes at its own pace"),
        (["--listen", "--volume", "loud"], "must be a number of dB"),
        (["--listen", "--volume", "6"], "must lie between -80 and 0 dB"),
        (["--listen", "nobody"], "no channel is named 'nobody'"),
        (["--listen", "a/b/c"], "there are two ears"),
    ],
)
def test_bad_options(capsys, recording, options, rule):
    assert rule in refused(capsys, ["receive", str(recording), "--channel", "1MHz A3E", *options])


def test_out_that_is_no_folder(capsys, recording):
    line = refused(capsys, ["receive", str(recording), "--channel", "1MHz A3E", "--out", str(recording)])
    assert "not a folder that can be made" in line


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        ("[[channel", "not a readable TOML file"),
        ("[source]\npath = 'x.cu8'", "at least one [[channel]]"),
        ("[[channel]]\nfrequency = '1MHz'\nemission = 'A3E'", "one [source] table"),
        ("[source]\npath = 'a'\nreceiver = 'b'\n[[channel]]\nfrequency='1MHz'\nemission='A3E'", "needs either path"),
        ("[source]\npath = 'a'\n[[channel]]\nfrequency='1MHz'\nemission='A3'", "channel 1: emission=A3"),
        ("[source]\npath = 'a'\n[[channel]]\nemission='A3E'", "channel 1: channel="),
        ("[tuner]\n", "not a table of a station file"),
    ],
)
def test_bad_station_files(capsys, tmp_path, text, rule):
    path = tmp_path / "station.toml"
    path.write_text(text)
    line = refused(capsys, ["receive", str(path)])
    assert rule in line
    assert str(path) in line


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        ("", "one [capture] table"),
        ("[capture]\nrate='48kHz'\ncentre='1MHz'\nseconds=-1", "seconds=-1"),
        ("[capture]\nrate='48kHz'\ncentre='1MHz'\nseconds=1\nloud=1", "not a key here"),
        ("[capture]\nrate='48kHz'\ncentre='1MHz'\nseconds=1e6", "must be a number"),
        (
            "[capture]\nrate='48kHz'\ncentre='1MHz'\nseconds=1\n[[emission]]\nname='a'\nemission='A3E'\n"
            "frequency='5MHz'\nlevel_dbfs=-20\nmessage={kind='silence'}",
            "lies outside the capture",
        ),
        (
            "[capture]\nrate='48kHz'\ncentre='1MHz'\nseconds=1\n[[emission]]\nname='a'\nemission='QAM'\n"
            "frequency='1MHz'\nlevel_dbfs=-20\nmessage={kind='silence'}",
            "QAM carries 2",
        ),
    ],
)
def test_bad_scenes(capsys, tmp_path, text, rule):
    path = tmp_path / "scene.toml"
    path.write_text(text)
    line = refused(capsys, ["synthesize", str(path), str(tmp_path / "out")])
    assert rule in line
    assert not (tmp_path / "out.sigmf-data").exists()


@pytest.mark.parametrize(
    "arguments", [["frobnicate"], [], ["receive"], ["receive", "--loud", "x"], ["survey", "x.cu8"]]
)
def test_usage(capsys, arguments):
    with pytest.raises(SystemExit) as exit_:
        main(arguments)
    assert exit_.value.code == 2
    assert capsys.readouterr().err.count("\n") == 1


def test_help_needs_none_of_the_heavy_libraries():
    """What makes ``--help`` quick is what it does not import; counted instead of timed."""
    code = "import sys; from rxchain.cli.main import main\ntry: main(['--help'])\nexcept SystemExit: pass\n" + (
        "heavy = {'numpy', 'scipy', 'rich', 'soundfile', 'sigmf', 'rtlsdr'} & set(sys.modules); assert not heavy, heavy"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)


def test_the_receiver_never_imports_the_slow_signal_library():
    code = (
        "import sys; import rxchain.cli.reception; from rxchain.chain.channel_settings import channel_from_text\n"
        "assert 'scipy.signal' not in sys.modules and 'scipy.stats' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)
