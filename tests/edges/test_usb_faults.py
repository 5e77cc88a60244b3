"""A USB receiver's faults, one by one, and what an operator sees of each: the stand-in paced as a receiver is."""

import pytest
from test_usb_receiver import BUFFER, library, run  # noqa: F401

SAMPLES = BUFFER // 2
BUFFER_S = SAMPLES / 2.4e6
# A gap is as long as the clock says; the arrival of a buffer wanders on a busy machine.
ARRIVES_WITHIN_S = 0.030

RECEIVE = """
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.chain.runner import Runner
from rxchain.dashboard.plain import progress_line
from rxchain.sinks.audio_folder import NoAudio

import rxchain.sources.rtlsdr_receiver as patient
patient._FIRST_WAIT_S, patient._HANGS_S = 0.2, 0.8  # less than an operator has, and all else as it is
source = RtlsdrReceiver({wanted}, ReceiverSettings(2.4e6, 118.5e6{more}))
seen, told, blocks = [], [], []
class Watched:
    info = source.info
    def blocks(self):
        for block in source.blocks():
            blocks.append((block.index, len(block.iq), block.samples_lost, block.centre_hz))
            trouble = source.health.trouble
            if trouble and (not told or told[-1] != trouble):
                told.append(trouble)
            {act}
            yield block
            if time.monotonic() - started > {seconds}:
                return
    def close(self):
        source.close()
receiver = Receiver(source.info, (channel_from_text('118.1MHz A3E'), ))
runner = Runner(Watched(), receiver, NoAudio(), time.monotonic, seen.append, lambda: source.health)
started = time.monotonic()
outcome = runner.run()
elapsed = time.monotonic() - started
last = seen[-1]
print(json.dumps({{'lost': receiver.samples_lost, 'gaps': receiver.gaps, 'seen_s': receiver.elapsed_s, 'told': told,
    'late': last.late_blocks, 'short': last.short_buffers, 'reopened': last.reopened, 'line': progress_line(last),
    'elapsed_s': elapsed, 'lines': [progress_line(one) for one in seen], 'blocks': blocks, 'gain': last.gain_db,
    'centre': receiver.info.centre_hz, 'fault': str(outcome.fault)}}))
"""


def receive(folder, seconds, faults="", wanted=None, more="", act="pass", **environment):
    body = RECEIVE.format(seconds=seconds, wanted=repr(wanted), more=more, act=act)
    return run(folder, body, STANDIN_PACED="1", STANDIN_LOOPS="1", STANDIN_FAULTS=faults, **environment)


def is_continuous(blocks):
    """Each block starts where the one before ended, lost samples counted."""
    expected = 0
    for index, n, lost, _ in blocks:
        if index != expected + lost:
            return False
        expected = index + n
    return True


def test_nothing_wrong_nothing_said(library):  # noqa: F811
    got, _ = receive(library, 1.2)
    assert (got["lost"], got["gaps"], got["late"], got["short"], got["reopened"], got["told"]) == (0, 0, 0, 0, 0, [])
    assert got["seen_s"] == pytest.approx(got["elapsed_s"], abs=0.3)


@pytest.mark.parametrize("code", ["5", "0"])
def test_unplugged_and_plugged_in_again(library, code):  # noqa: F811
    got, log = receive(library, 2.0, f"unplug@60:{code}")
    assert got["told"][0].startswith("the receiver is gone")
    assert any("NO SAMPLES: the receiver is gone" in line for line in got["lines"])
    assert got["reopened"] == 1
    assert "receiver lost and found again 1 time(s)" in got["line"]
    assert "NO SAMPLES" not in got["line"]
    assert got["gaps"] == 1
    assert is_continuous(got["blocks"])
    # Away for 0.3 s, looked for after 0.2 and 0.6 s; the stream's time is the clock's all along.
    assert 0.5 < got["lost"] / 2.4e6 < 1.0
    assert got["seen_s"] == pytest.approx(got["elapsed_s"], abs=0.3)
    assert log.count("open 0\n") == 2
    assert log.count("frequency 118500000\n") == 2  # set again as before
    assert got["fault"] == "None"


def test_a_receiver_that_hangs_is_opened_again(library):  # noqa: F811
    got, _ = receive(library, 2.6, "hang@40:0")
    assert got["told"][0].startswith("no samples for 0.")  # said long before it is given up
    assert any("it hangs" in words for words in got["told"])
    assert got["reopened"] == 1
    assert got["gaps"] == 1
    assert 0.9 < got["lost"] / 2.4e6 < 1.5
    assert is_continuous(got["blocks"])


def test_buffers_that_vanish_are_found_by_the_clock(library):  # noqa: F811
    got, _ = receive(library, 2.8, "drop@120:40")
    assert got["gaps"] == 1
    assert got["lost"] / 2.4e6 == pytest.approx(41 * BUFFER_S, abs=ARRIVES_WITHIN_S)
    assert "samples lost in 1 gap(s)" in got["line"]


def test_a_late_buffer_is_counted_and_nothing_is_lost(library):  # noqa: F811
    got, _ = receive(library, 1.4, "stall@80:250")
    assert (got["lost"], got["gaps"], got["late"]) == (0, 0, 1)
    assert "1 blocks late" in got["line"]


def test_short_buffers_are_counted_and_their_rest_is_a_gap(library):  # noqa: F811
    got, _ = receive(library, 1.0, "short@60:0 short@100:0")
    assert (got["short"], got["gaps"]) == (2, 2)
    assert got["lost"] == 2 * SAMPLES // 2
    assert "2 buffers short" in got["line"]


def test_retuning_goes_on_and_tells_where(library):  # noqa: F811
    act = "len(blocks) == 60 and source.retune(119.0e6)"
    got, log = receive(library, 1.0, act=act)
    assert "frequency 119000000\n" in log
    assert got["centre"] == 119.0e6
    moved = [block for block in got["blocks"] if block[3] is not None]
    assert len(moved) == 1
    assert moved[0][2] == 12 * SAMPLES  # while the tuner settles
    assert (got["gaps"], got["reopened"]) == (1, 0)
    assert is_continuous(got["blocks"])


def test_a_retune_that_the_tuner_refuses_is_said_and_nothing_stops(library):  # noqa: F811
    act = """
            if len(blocks) == 60:
                try:
                    source.retune(119.0e6)
                except ReceiverError as error:
                    told.append(str(error))
    """
    got, _ = receive(library, 0.9, act=act.strip(), STANDIN_REFUSES="119000000")
    assert "centre=1.19e+08Hz: the driver refuses center freq 119000000" in got["told"][0]
    assert (got["lost"], got["gaps"], got["centre"]) == (0, 0, 118.5e6)


def test_by_index_and_by_serial(library):  # noqa: F811
    for wanted in ("1", "00000002"):
        _, log = receive(library, 0.2, wanted=wanted, STANDIN_DEVICES="2")
        assert "open 1\n" in log


def test_headroom_lowers_the_gain_while_the_converter_overloads(library):  # noqa: F811
    # Random bytes touch the rails all the time: from the middle of six gains down to the lowest, a step each 100 ms.
    got, log = receive(library, 1.0, more=", headroom=True")
    gains = [int(line.split()[1]) for line in log.splitlines() if line.startswith("gain ")]
    assert gains[-4:] == [280, 197, 90, 0]
    assert got["gain"] == 0.0
    assert "gain 0.0 dB" in got["line"]


def test_voltage_on_the_antenna_line_is_by_name_and_goes_off_again(library):  # noqa: F811
    _, log = receive(library, 0.2, more=", bias_voltage=True")
    bias = [line for line in log.splitlines() if line.startswith("bias")]
    assert bias == ["bias 0", "bias 1", "bias 0"]
    _, log = receive(library, 0.2)
    assert "bias 1" not in log


def test_a_clock_error_is_put_right_to_the_fraction(library):  # noqa: F811
    got, log = receive(library, 0.2, more=", ppm=12.4")
    assert "ppm 12\n" in log
    assert got["centre"] == pytest.approx(118.5e6 * (1 + 0.4e-6), abs=0.01)
