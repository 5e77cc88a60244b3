"""Short delay for what is heard: how much, and what it costs."""

import numpy as np
import pytest

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.detectors.sidebands import both_sidebands, one_sideband
from rxchain.emissions import Side
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block

RATE_HZ, CENTRE_HZ = 2.4e6, 118.5e6
BUFFER = 16_384  # what a USB receiver delivers at a time
# What a speaker adds: two pieces and a guard in reserve, look-ahead and reach of the interpolator, the output's own.
SPEAKER_S = 0.015 + 0.003 + 0.003 + 0.005 + 0.025


def audio_behind_stream_s(text):
    """The longest that audio lags behind the stream, right after a buffer has been worked on."""
    receiver = Receiver(SourceInfo("receiver", "test", RATE_HZ, CENTRE_HZ, None, None), (channel_from_text(text),))
    n, lags = 0, []
    for k in range(300):
        pieces = receiver.process(Block(np.full(BUFFER, 0.1, np.complex64), k * BUFFER))
        n += sum(piece.audio.shape[1] for piece in pieces)
        lags.append(receiver.elapsed_s - n / receiver.audio_rate_hz(0))
    return max(lags[100:])


@pytest.mark.parametrize(("detector", "wanted_s"), [("envelope", 0.120), ("coherent", 0.180), ("auto", 0.180)])
def test_from_buffer_to_sound(detector, wanted_s):
    lag_s = audio_behind_stream_s(f"118.1MHz A3E delay=live squelch=off detector={detector}")
    assert lag_s + SPEAKER_S < wanted_s


def response_db(taps, rate_hz=12_000.0):
    f = np.fft.fftshift(np.fft.fftfreq(1 << 16, 1 / rate_hz))
    return f, 20 * np.log10(np.abs(np.fft.fftshift(np.fft.fft(taps, 1 << 16))) + 1e-12)


def test_the_shorter_filters_keep_the_band_flat_the_carrier_out_and_the_other_sideband_down():
    short, full = both_sidebands(100.0, 4_500.0, 12_000.0, live=True), both_sidebands(100.0, 4_500.0, 12_000.0)
    assert len(short) < 0.5 * len(full)
    f, gain_db = response_db(short)
    assert np.abs(gain_db[(f > 130.0) & (f < 4_500.0)]).max() < 0.1
    assert gain_db[np.argmin(np.abs(f))] < -100.0  # the running mean takes the carrier out exactly
    short = one_sideband(Side.UPPER, 300.0, 2_700.0, 12_000.0, live=True)
    f, gain_db = response_db(short)
    assert np.abs(gain_db[(f > 300.0) & (f < 2_700.0)]).max() < 0.1
    assert gain_db[f < 0.0].max() < -60.0
    assert len(short) < 0.5 * len(one_sideband(Side.UPPER, 300.0, 2_700.0, 12_000.0))


def test_an_envelope_that_waits_for_no_carrier_is_the_message_on_its_instant():
    rate_hz, n = 48_000.0, 144_000
    t = np.arange(n) / rate_hz
    message = 0.5 * np.sin(2 * np.pi * 700.0 * t) * np.sin(2 * np.pi * 1.5 * t)
    iq = (0.4 * (1 + message) * np.exp(2j * np.pi * 5_030.0 * t)).astype(np.complex64)  # 30 Hz off
    channel = channel_from_text("1.005MHz A3E delay=live detector=envelope agc=off squelch=off")
    receiver = Receiver(SourceInfo("recording", "test", rate_hz, 1e6, None, n), (channel,))
    pieces = [piece.audio for block in np.array_split(iq, 50) for piece in receiver.process(Block(block, 0))]
    pieces += [piece.audio for piece in receiver.flush()]
    audio = np.concatenate(pieces, axis=1)[0]
    assert len(audio) == n // 4
    middle = slice(6_000, 30_000)
    np.testing.assert_allclose(audio[middle], 0.4 * message[::4][middle], atol=0.004)  # a hundredth of the carrier
    receiver.measure(overall=True)
    assert receiver.figures(0).carrier_offset_hz.value == pytest.approx(30.0, abs=0.1)  # followed all the same
