"""Airband stations as far off as they may be: ICAO Annex 10 Vol. III 2.2.2.3, 0.005 % (25 kHz) and 0.0005 % (8.33 kHz)."""

from __future__ import annotations

from dataclasses import replace

import pytest
from scenes import run_blocks, station
from signals import fit

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.errors import SettingError
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block
from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Scene

RATE_HZ, SECONDS = 96_000.0, 4.0
SNR_DB, LOST_DB = 20.0, 0.3
LOCKED_WITHIN_S = 0.5


@pytest.mark.parametrize(
    ("spacing", "audio_hz", "offset_hz"),
    [
        ("25kHz", (300.0, 3_400.0), 6_500.0),
        ("25kHz", (300.0, 3_400.0), -6_500.0),
        ("8.33kHz", (350.0, 2_500.0), 650.0),
        ("8.33kHz", (350.0, 2_500.0), -650.0),
    ],
)
def test_a_station_at_the_edge_of_its_tolerance_is_received(
    spacing: str, audio_hz: tuple[float, float], offset_hz: float
) -> None:
    one = replace(station("A3E", 1.01e6, offset_hz=offset_hz), audio_hz=audio_hz)
    scene = Scene(RATE_HZ, 1e6, SECONDS, (one,), noise_dbfs_hz=-75.0)
    raised_db = SNR_DB - render(scene).truths[0].snr_db[0]
    scene = replace(scene, stations=(replace(one, level_dbfs=one.level_dbfs + raised_db),))
    rendered = render(scene)
    truth = rendered.truths[0]
    info = SourceInfo("recording", "airband", RATE_HZ, 1e6, None, len(rendered.iq))
    receiver = Receiver(info, (channel_from_text(f"1010kHz A3E spacing={spacing} squelch=off agc=off"),))
    audio = run_blocks(receiver, [Block(rendered.iq, 0)])[0][0].astype(float)
    group, row = receiver.group_of(0)
    assert group.first_lock_s(row) <= LOCKED_WITHIN_S
    assert receiver.figures(0).carrier_offset_hz.value == pytest.approx(offset_hz, abs=0.05)
    rate_hz = receiver.audio_rate_hz(0)
    message = truth.messages[0][:: round(truth.message_rate_hz / rate_hz)]  # band-limited far under either rate
    steady = slice(int(rate_hz), int(3.7 * rate_hz))
    assert -fit(audio[steady], message[: len(audio)][steady])[1] > SNR_DB - LOST_DB


def test_spacing_is_refused_for_what_the_airband_does_not_use() -> None:
    with pytest.raises(SettingError, match="spacing=25kHz"):
        channel_from_text("7.1MHz J3E-USB spacing=25kHz")
    with pytest.raises(SettingError, match=r"one of 25kHz, 8\.33kHz"):
        channel_from_text("121.5MHz A3E spacing=50kHz")
