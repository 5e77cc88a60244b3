"""Notch, impulse blanker and de-emphasis: what they take out, what they leave, and at what price."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scenes import SourceInfo, render, resampled, run_blocks, station
from scipy.linalg import solve_toeplitz
from scipy.signal import resample_poly
from signals import through

from rxchain.audio.deemphasis import deemphasis_taps
from rxchain.audio.notch import ToneNotch
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.errors import SettingError
from rxchain.streams import Block
from rxchain.synthesis.messages import Message
from rxchain.synthesis.scene import Impulses, Scene
from rxchain.tuning.impulse_blanker import ImpulseBlanker

RATE_HZ = 12_000.0
NOTCHED_DB, NOTCHED_S, SPEECH_LOSS_DB = -30.0, 0.5, 1.0  # the aims
# A tone no stronger than the voice is told from it a twentieth of a second later.
WEAK_TONE_S = 0.62
SHORT_DB, LONG_DB = 3.0, 6.0  # of SINAD that impulses of up to 0.1 ms, and of 0.5 ms, may cost
CURVE_DB = 0.06


def notched(audio, tone_hz=float("nan")):
    return through(ToneNotch([tone_hz], 1, RATE_HZ), audio.astype(np.float32)[None, None])[0, 0]


@pytest.fixture(scope="module")
def voice(shared_recordings):
    import soundfile

    samples, _ = soundfile.read(shared_recordings / "speech" / "woman-30s-8k.wav")
    return resample_poly(samples, 3, 2)[: int(14 * RATE_HZ)]


@pytest.mark.parametrize(("tone_db", "within_s"), [(0.0, WEAK_TONE_S), (10.0, NOTCHED_S), (20.0, NOTCHED_S)])
def test_a_steady_tone_beside_a_voice_is_gone_within_half_a_second(voice, tone_db, within_s):
    t, start_s, tone_hz = np.arange(len(voice)) / RATE_HZ, 3.0, 1_234.5
    amplitude = np.sqrt(2 * np.mean(voice**2)) * 10 ** (tone_db / 20)
    tone = amplitude * np.cos(2 * np.pi * tone_hz * t) * (t > start_s)
    left = (notched(voice + tone) - voice) * np.exp(-2j * np.pi * tone_hz * t)
    piece = 600
    size_db = 20 * np.log10(
        2 * np.abs(left[: len(t) // piece * piece].reshape(-1, piece).mean(axis=1)) / amplitude + 1e-9
    )
    after = size_db[round((start_s + within_s) * RATE_HZ / piece) :]
    assert np.median(after) < -50.0
    assert np.mean(after < NOTCHED_DB + 5.0) > 0.9  # where the voice itself crosses 1234 Hz some of it is counted in
    assert np.median(after[:4]) < NOTCHED_DB


def test_a_voice_alone_passes(voice):
    heard = notched(voice)
    assert abs(10 * np.log10(np.mean(heard**2) / np.mean(voice**2))) < SPEECH_LOSS_DB
    assert np.mean((heard - voice) ** 2) < 1e-3 * np.mean(voice**2)


def test_a_given_frequency_is_taken_out_at_once():
    t = np.arange(24_000) / RATE_HZ
    low, high = np.cos(2 * np.pi * 1_000.0 * t), np.cos(2 * np.pi * 1_400.0 * t)
    heard = notched(low + high, 1_000.0)[2_000:-2_000]
    assert np.std(heard - high[2_000:-2_000]) < 1e-3


def test_the_notch_of_a_channel_and_what_it_refuses():
    one = replace(station("A3E", 1e6, kind="tone"), audio_hz=(100.0, 4_500.0))
    scene = Scene(48_000.0, 1e6, 4.0, (one,), seed=3, noise_dbfs_hz=-100.0)
    rendered = render(scene)
    levels = {}
    for key in ("off", "auto", "700Hz"):
        info = SourceInfo("recording", "scene", scene.rate_hz, 1e6, None, len(rendered.iq))
        receiver = Receiver(info, (channel_from_text(f"1MHz A3E name=x agc=off squelch=off notch={key}"),))
        audio = run_blocks(receiver, [Block(rendered.iq, 0)])[0]
        assert audio.shape[1] == 4 * 12_000
        levels[key] = np.std(audio[0, 24_000:-3_000])  # the end of the stream is an edge of the tone
    assert 20 * np.log10(levels["auto"] / levels["off"]) < NOTCHED_DB
    assert 20 * np.log10(levels["700Hz"] / levels["off"]) < NOTCHED_DB
    with pytest.raises(SettingError, match="would take out the note"):
        channel_from_text("1MHz A1A notch=auto")
    with pytest.raises(SettingError, match="must lie within"):
        channel_from_text("1MHz J3E-USB notch=5kHz")


def sinad_db(heard, message):
    """Of a message through the best filter of 64 taps against all that is left."""
    n = 1 << int(np.ceil(np.log2(2 * len(heard))))
    of_message, of_heard = np.fft.rfft(message, n), np.fft.rfft(heard, n)
    own = np.fft.irfft(np.abs(of_message) ** 2, n)[:64]
    cross = np.roll(np.fft.irfft(of_heard * np.conj(of_message), n), 32)[:64]
    own[0] *= 1 + 1e-8
    signal = solve_toeplitz(own, cross) @ cross / len(heard)
    return 10 * np.log10(signal / (np.mean(heard**2) - signal))


@pytest.mark.parametrize(("length_s", "cost_db"), [(1e-5, SHORT_DB), (1e-4, SHORT_DB), (5e-4, LONG_DB)])
def test_impulses_40_db_above_the_signal(shared_recordings, length_s, cost_db):
    """A hundred a second, on a voice 20 dB above its noise; against the same samples without impulses."""
    spoken = Message("sound", path=shared_recordings / "speech" / "woman-30s-8k.wav", start_s=2.0)
    one = replace(station("J3E-USB", 1e6), messages=(spoken,), audio_hz=(300.0, 2_700.0), level_dbfs=-50.0)
    figures = {}
    for name, impulses, key in (("free", (), "off"), ("through", 1, "off"), ("blanked", 1, "auto")):
        hits = (Impulses(100.0, length_s, -20.0),) if impulses else ()
        scene = Scene(480_000.0, 1e6, 4.0, (one,), seed=3, noise_dbfs_hz=-113.0, impulses=hits)
        rendered = render(scene)
        info = SourceInfo("recording", "scene", scene.rate_hz, 1e6, None, len(rendered.iq))
        receiver = Receiver(info, (channel_from_text(f"1MHz J3E-USB name=x agc=off squelch=off blanker={key}"),))
        blocks = [Block(rendered.iq[k : k + 60_000], k) for k in range(0, len(rendered.iq), 60_000)]
        heard = run_blocks(receiver, blocks)[0][0].astype(float)
        truth = rendered.truths[0]
        message = resampled(truth.messages[0], truth.message_rate_hz, len(heard), RATE_HZ)
        figures[name] = sinad_db(heard[6_000:], message[6_000:])
    assert figures["blanked"] > figures["free"] - cost_db
    assert figures["through"] < figures["free"] - 10.0


def test_a_blanker_leaves_a_clean_stream_alone():
    rng = np.random.default_rng(1)
    t = np.arange(200_000) / 192_000.0
    strong = np.exp(2j * np.pi * 40e3 * t) * (1 + 0.9 * np.cos(2 * np.pi * 700 * t))
    iq = (strong + 0.01 * (rng.standard_normal(len(t)) + 1j * rng.standard_normal(len(t)))).astype(np.complex64)
    blanker = ImpulseBlanker(192_000.0)
    out = np.concatenate([blanker.process(iq), blanker.flush()])
    assert np.array_equal(out, iq)
    assert blanker.blanked == 0


def test_a_blanker_does_not_mind_the_blocks():
    rng = np.random.default_rng(2)
    iq = (0.01 * (rng.standard_normal(30_000) + 1j * rng.standard_normal(30_000))).astype(np.complex64)
    iq[rng.integers(0, 30_000, 60)] = 1.0
    iq[259 * np.arange(1, 100)] = 1.0  # at the seams of its own blocks too
    whole = ImpulseBlanker(96_000.0)
    expected = np.concatenate([whole.process(iq), whole.flush()])
    assert len(expected) == len(iq)
    for seed in range(5):
        cuts = np.sort(np.random.default_rng(seed).integers(0, 30_000, 40))
        pieces = ImpulseBlanker(96_000.0)
        made = [pieces.process(part) for part in np.split(iq, cuts)]
        assert np.array_equal(np.concatenate([*made, pieces.flush()]), expected)
        assert pieces.blanked == whole.blanked
    assert not expected[np.abs(iq) > 0.5].any()


def test_what_is_cut_is_counted():
    iq = np.full(50_000, 0.1, np.complex64)
    iq[20_000:20_003] = 5.0
    blanker = ImpulseBlanker(96_000.0)
    out = np.concatenate([blanker.process(iq), blanker.flush()])
    assert blanker.blanked == int(np.sum(out == 0)) > 3
    assert np.array_equal(out[:19_990], iq[:19_990])


# NRSC-1 (EIA-549), corners from memory; the values follow from them: dB below the level at 0 Hz.
@pytest.mark.parametrize(
    ("at_hz", "down_db"), [(100, 0.01), (400, 0.14), (1_000, 0.81), (2_122, 2.76), (4_000, 5.75), (4_500, 6.37)]
)
@pytest.mark.parametrize("rate_hz", [12_000.0, 24_000.0])
def test_the_curve_of_broadcast_deemphasis(at_hz, down_db, rate_hz):
    taps = deemphasis_taps(rate_hz)
    t = (np.arange(len(taps)) - len(taps) // 2) / rate_hz
    response = np.sum(taps * np.exp(-2j * np.pi * at_hz * t))
    assert -20 * np.log10(abs(response)) == pytest.approx(down_db, abs=CURVE_DB)


@pytest.mark.parametrize("detector", ["envelope", "coherent"])
def test_deemphasis_of_a_channel(detector):
    one = replace(
        station("A3E", 1e6), messages=(Message("tones", frequencies_hz=(400.0, 4_000.0)),), audio_hz=(100.0, 4_500.0)
    )
    scene = Scene(48_000.0, 1e6, 3.0, (one,), seed=3)
    rendered = render(scene)
    info = SourceInfo("recording", "scene", scene.rate_hz, 1e6, None, len(rendered.iq))
    text = f"1MHz A3E name=x agc=off squelch=off detector={detector} deemphasis=nrsc"
    audio = run_blocks(Receiver(info, (channel_from_text(text),)), [Block(rendered.iq, 0)])[0][0, 18_000:30_000]
    t = np.arange(len(audio)) / RATE_HZ
    low, high = (abs(np.mean(audio * np.exp(-2j * np.pi * f * t))) for f in (400.0, 4_000.0))
    assert 20 * np.log10(low / high) == pytest.approx(5.75 - 0.14, abs=0.2)
    with pytest.raises(SettingError, match="is for broadcasts"):
        channel_from_text("1MHz J3E-USB deemphasis=nrsc")
