"""The dashboard and the plain lines, drawn without a terminal and read as words."""

import io
from dataclasses import replace

import numpy as np
import pytest
from rich.console import Console

from rxchain.chain.status import ChannelStatus, ReceiverStatus
from rxchain.dashboard.bars import ASCII, BLOCKS, depth_bar, snr_bar
from rxchain.dashboard.keys import Keyboard
from rxchain.dashboard.layout import picture
from rxchain.dashboard.plain import PlainLines, channel_line
from rxchain.dashboard.screen import Dashboard
from rxchain.meters.figures import Figures
from rxchain.streams import Reading

FIGURES = Figures(
    snr_db=Reading(21.44, 0.3),
    carrier_offset_hz=Reading(-12.41, 0.02),
    carrier_to_noise_density_dbhz=Reading(61.2, 0.2),
    depth_percent=Reading(84.0, 2.0),
    depth_positive_percent=Reading(81.0, 2.0),
    depth_negative_percent=Reading(87.0, 2.0),
    power_efficiency_percent=Reading(11.9, 0.2),
    level_dbfs=Reading(-33.2, 0.1),
)


def channel(name="harbour", **changes):
    given = {
        "name": name,
        "frequency_hz": 2.721e6,
        "emission": "A3E",
        "emission_given": True,
        "emission_confidence": 1.0,
        "detector": "coherent",
        "detector_reason": "carrier locked: the envelope would cost 3.1 dB",
        "lock": "locked",
        "open": True,
        "messages": ("both",),
        "audio_hz": (300.0, 2_700.0),
        "audio_dbfs": (-21.0,),
        "gain_db": 14.0,
        "recent": FIGURES,
        "overall": FIGURES,
        "offset_trend_hz": np.array([1.0, 2.0, np.nan, 3.0]),
        "snr_trend_db": np.array([20.0, 21.0]),
    }
    return ChannelStatus(**(given | changes))


def status(channels, **changes):
    given = {
        "source": "coast.sigmf-meta",
        "sample_rate_hz": 96e3,
        "centre_hz": 2.75e6,
        "start": None,
        "elapsed_s": 75.0,
        "progress": 0.5,
        "speed": 2.0,
        "samples_lost": 0,
        "gaps": 0,
        "overload_fraction": 0.0,
        "late_blocks": 0,
        "spectrum_dbfs": np.linspace(-90, -30, 480),
        "channels": tuple(channels),
    }
    return ReceiverStatus(**(given | changes))


def drawn(shown, width, height, selected=0, glyphs=BLOCKS):
    console = Console(width=width, height=height, file=io.StringIO(), force_terminal=True, no_color=True, _environ={})
    with console.capture() as capture:
        console.print(picture(shown, Keyboard(selected=selected), width, height, glyphs))
    text = capture.get()
    plain = "".join(part.partition("m")[2] if k else part for k, part in enumerate(text.split("\x1b[")))
    return plain.splitlines()


@pytest.mark.parametrize(("width", "height"), [(80, 24), (120, 40), (160, 50), (60, 12), (44, 10)])
def test_fits_its_screen_and_shows_the_key_figures(width, height):
    lines = drawn(status([channel(), channel("pilots", lock="held")]), width, height)
    assert len(lines) <= height
    assert max(map(len, lines)) <= width
    text = "\n".join(lines)
    for word in ("harbour", "pilots", "A3E", "21", "-12.4"):
        assert word in text
    if width >= 80:
        assert "84" in text
        assert "2.721 MHz" in text
        assert "21.4 ± 0.3 dB" in text
        assert "the envelope would cost 3.1 dB" in text
    if width >= 120:
        assert "coherent" in text


def test_over_modulation_is_marked_without_colour():
    over = replace(FIGURES, depth_negative_percent=Reading(118.0, 1.0))
    row = next(line for line in drawn(status([channel(recent=over)]), 120, 40) if line.startswith("harbour "))
    assert "84!" in row
    assert BLOCKS.over in row
    assert "!" not in next(line for line in drawn(status([channel()]), 120, 40) if line.startswith("harbour "))


def test_figures_without_meaning_are_a_dash():
    lines = drawn(
        status([channel("net", emission="J3E-LSB", recent=Figures(), overall=Figures(), lock="nominal")]), 120, 40
    )
    row = next(line for line in lines if line.startswith("net "))
    assert row.count("–") >= 3
    assert "by dial" in row


def test_hundreds_of_channels_scroll_to_the_selected_one():
    many = [channel(f"ch{k:03d}") for k in range(300)]
    for selected in (0, 150, 299):
        lines = drawn(status(many), 80, 24, selected)
        assert len(lines) <= 24
        assert any(line.startswith(f"ch{selected:03d} ") for line in lines)
    assert any("of 300" in line for line in drawn(status(many), 80, 24))


def test_trouble_is_loud_only_when_there_is_some():
    quiet = "\n".join(drawn(status([channel()]), 160, 40))
    assert "!" not in quiet
    loud = "\n".join(
        drawn(status([channel()], gaps=2, samples_lost=480, overload_fraction=0.013, late_blocks=3), 160, 40)
    )
    for words in ("480 samples lost in 2 gaps", "overload 1.3 %", "3 blocks late"):
        assert words in loud


def test_text_from_outside_cannot_act():
    hostile = channel("\x1b[2J[red]x[/red]", detector_reason="[link=http://x]\x07")
    text = "\n".join(drawn(status([hostile], source="\x1b]0;title\x07"), 120, 40))
    assert "\x07" not in text
    assert "[red]x" in text  # shown as it is, not obeyed
    assert "\x1b" not in channel_line(hostile)


def test_ascii_where_the_terminal_has_nothing_else():
    for glyphs in (ASCII,):
        assert (snr_bar(20.0, 12, glyphs) + depth_bar(80.0, 120.0, 6, glyphs)).isascii()
    console = Console(file=io.TextIOWrapper(io.BytesIO(), encoding="ascii"), _environ={})
    assert Dashboard(console)._glyphs is ASCII


def test_grades_of_reception_are_ticks():
    """6, 15 and 33 dB of audio SNR: just usable, marginal, good (ITU-R F.339, from memory)."""
    empty = snr_bar(None, 41, ASCII)
    assert [k for k, character in enumerate(empty) if character == ":"] == [6, 15, 33]
    assert ":" not in snr_bar(40.0, 41, ASCII)


def test_plain_lines_come_at_their_time_and_survive_a_reader_that_goes():
    now = [0.0]
    output = io.StringIO()
    lines = PlainLines(output, lambda: now[0])
    with lines.running(lambda: None):
        lines.show(status([channel()]))
        assert output.getvalue() == ""
        now[0] = 11.0
        lines.show(status([channel()]))
        assert output.getvalue().count("\n") == 1
    assert "harbour: 2.721 MHz A3E, coherent" in output.getvalue()

    class Gone(io.StringIO):
        def write(self, _):
            raise BrokenPipeError

    broken = PlainLines(Gone(), lambda: 0.0)
    with broken.running(lambda: None):
        broken.show(status([channel()]))


def test_snapshots_of_a_real_run_are_drawn_from_first_to_last():
    """The first snapshots have no figures yet, the later ones have all kinds of them, as the meters make them."""
    from scenes import channel_text, one_of_each

    from rxchain.chain.channel_settings import channel_from_text
    from rxchain.chain.receiver import Receiver
    from rxchain.chain.runner import Runner
    from rxchain.sources.protocol import SourceInfo
    from rxchain.streams import Block
    from rxchain.synthesis.render import render
    from rxchain.synthesis.scene import Scene

    scene = Scene(288_000.0, 1e6, 3.0, tuple(one_of_each()), noise_dbfs_hz=-95.0)
    iq = render(scene).iq
    info = SourceInfo("recording", "scene", 288_000.0, 1e6, None, len(iq))
    receiver = Receiver(info, tuple(channel_from_text(channel_text(one)) for one in scene.stations))
    shown = []

    class Recorded:
        info = receiver.info

        def blocks(self):
            yield from (Block(iq[k : k + 28_800], k) for k in range(0, len(iq), 28_800))

        def close(self):
            pass

    class Nowhere:
        def write(self, audio):
            pass

    ticks = iter(range(10_000))
    Runner(Recorded(), receiver, Nowhere(), lambda: float(next(ticks)), shown.append).run()
    assert len(shown) > 20
    for snapshot in shown:
        for width, height in ((80, 24), (120, 40)):
            lines = drawn(snapshot, width, height)
            assert max(map(len, lines)) <= width
    assert "a3e" in "\n".join(drawn(shown[-1], 120, 40))
    assert "locked" in "\n".join(drawn(shown[-1], 120, 40))


def test_a_failing_picture_does_not_stop_the_run(capsys, monkeypatch):
    dashboard = Dashboard(Console(file=io.StringIO(), _environ={}))

    def broken(*_):
        raise ValueError("no picture")

    monkeypatch.setattr("rxchain.dashboard.screen.picture", broken)
    dashboard.show(status([channel()]))
    with dashboard.running(lambda: None):
        dashboard._ended.wait(0.01)
    assert "no picture" in capsys.readouterr().err
