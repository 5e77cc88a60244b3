"""What a user may choose: sidebands, rectifier, slopes, delays; and what happens where no pilot is sent."""

from dataclasses import replace

import numpy as np
import pytest
from scenes import receive, resampled, station
from signals import fit, hilbert

from rxchain.synthesis.messages import Message
from rxchain.synthesis.scene import Scene

CLEAN_DB = -40.0
STEADY_S = (3.5, 5.7)


def received(one, extra="", seconds=6.0, noise_dbfs_hz=None):
    scene = Scene(96_000.0, 1e6, seconds, (one,), seed=5, noise_dbfs_hz=noise_dbfs_hz)
    rendered, receiver, audio = receive(scene, f"{extra} agc=off squelch=off")
    truth = rendered.truths[0]
    rate_hz = receiver.audio_rate_hz(0)
    messages = [resampled(one, truth.message_rate_hz, audio[0].shape[1], rate_hz) for one in truth.messages]
    steady = slice(int(STEADY_S[0] * rate_hz), int(STEADY_S[1] * rate_hz))
    return audio[0][:, steady].astype(float), [message[steady] for message in messages], receiver, truth


@pytest.mark.parametrize(
    ("extra", "gain"),
    [
        ("detector=coherent sideband=upper", 1.0),
        ("sideband=lower", 1.0),
        ("sideband=better", 1.0),
        ("detector=envelope", 1.0),
        ("detector=rectifier", 2 / np.pi),
        ("delay=live", 1.0),
    ],
)
def test_ways_to_receive_full_carrier(extra, gain):
    audio, messages, receiver, _ = received(station("A3E", offset_hz=-41.0), extra)
    (amplitude,), left_db = fit(audio[0], messages[0])
    assert left_db < CLEAN_DB
    assert amplitude == pytest.approx(gain, rel=0.01)
    group, row = receiver.group_of(0)
    wanted = next((word.split("=")[1] for word in extra.split() if word.startswith("detector=")), None)
    assert wanted is None or group.detector(row)[0] == wanted


@pytest.mark.parametrize("name", ["C3E-USB", "C3E-LSB", "VSB-SC-USB", "VSB-SC-LSB"])
@pytest.mark.parametrize("slope", ["sent", "received", "measured"])
def test_three_ways_of_stating_a_vestigial_slope(name, slope, tmp_path):
    one = station(name, offset_hz=24.0)
    one = replace(one, how=replace(one.how, vestige_is_flat=slope == "received"))
    if slope == "measured":
        path = tmp_path / "response.txt"
        path.write_text("-1125 0.0\n1125 1.0  # the straight slope, as somebody measured it\n")
        extra = f"transmit_response={path}"
    else:
        extra = f"slope={slope}"
    audio, messages, _, _ = received(one, extra)
    (amplitude,), left_db = fit(audio[0], messages[0])
    assert left_db < CLEAN_DB
    assert abs(amplitude) == pytest.approx(1.0, rel=0.01)


def test_independent_sidebands_without_a_pilot_are_beaten_against_the_nominal_frequency():
    one = station("B8E")
    one = replace(one, how=replace(one.how, carrier_db=float("inf")))
    audio, messages, receiver, _ = received(one)
    for heard, message in zip(audio, messages, strict=True):
        _, left_db = fit(heard, message, hilbert(message))
        assert left_db < CLEAN_DB
    group, row = receiver.group_of(0)
    assert group.locked_fraction(row) == 0.0
    assert group.detector(row) == ("coherent", "no pilot found: beat against the nominal frequency")


SEPARATION_DB = 20.0  # two voices in quadrature without a pilot


def test_two_voices_in_quadrature_come_apart_without_a_pilot(shared_recordings):
    voices = tuple(
        Message("sound", path=shared_recordings / "speech" / name, start_s=2.0)
        for name in ("woman-30s-8k.wav", "man-7s-16k.wav")
    )
    one = replace(station("QAM", offset_hz=30.0, phase_degrees=50.0), messages=voices, audio_hz=(300.0, 2_700.0))
    one = replace(one, how=replace(one.how, pilot_db=float("inf")))
    audio, messages, receiver, _ = received(one, noise_dbfs_hz=-100.0)
    owners = []
    for heard in audio:
        amplitudes, _ = fit(heard, *messages)
        owners.append(int(np.argmax(np.abs(amplitudes))))
        assert 20 * np.log10(np.max(np.abs(amplitudes)) / np.min(np.abs(amplitudes))) > SEPARATION_DB
    assert sorted(owners) == [0, 1]
    group, row = receiver.group_of(0)
    assert "not known" in group.detector(row)[1]


def test_a_shift_by_hand_moves_a_single_sideband():
    one = station("J3E-USB", kind="tone", offset_hz=35.0)
    audio, _, _, _ = received(one, "align=+35Hz")
    t = np.arange(audio.shape[1]) / 12_000.0
    spectrum = np.abs([np.mean(audio[0] * np.exp(-2j * np.pi * f * t)) for f in (700.0, 735.0)])
    assert spectrum[0] > 100 * spectrum[1]


ALIGNED_HZ = 5.0  # hardly audible in speech, common practice
ANSWERED_S = 9.0  # by then the voice has been understood


@pytest.mark.parametrize(("name", "offset_hz"), [("J3E-USB", -85.0), ("J3E-LSB", 130.0)])
def test_a_voice_is_turned_to_where_its_harmonics_line_up(shared_recordings, name, offset_hz):
    voice = Message("sound", path=shared_recordings / "speech" / "woman-30s-8k.wav", start_s=2.0)
    one = replace(station(name, offset_hz=offset_hz), messages=(voice,), audio_hz=(300.0, 2_700.0))
    scene = Scene(48_000.0, 1e6, 14.0, (one,), seed=5, noise_dbfs_hz=-85.0)
    rendered, receiver, audio = receive(scene, "align=speech agc=off squelch=off")
    assert receiver.figures(0).carrier_offset_hz.value == pytest.approx(offset_hz, abs=ALIGNED_HZ)
    group, row = receiver.group_of(0)
    assert group.detector(row)[1] == "no carrier sent: turned to where the voice's harmonics line up"
    assert 0.0 < group.first_lock_s(row) < ANSWERED_S
    rate_hz, truth = receiver.audio_rate_hz(0), rendered.truths[0]
    after = slice(int((ANSWERED_S + 1.0) * rate_hz), None)
    message = resampled(truth.messages[0], truth.message_rate_hz, audio[0].shape[1], rate_hz)
    line = np.abs(np.fft.fft(hilbert(audio[0][0])[after] * np.conj(hilbert(message)[after])))
    assert abs(np.fft.fftfreq(len(line), 1.0 / rate_hz)[np.argmax(line)]) < ALIGNED_HZ


def test_noise_and_tones_are_no_voice_to_align_by():
    stations = tuple(
        replace(station("J3E-USB", 1e6 + at_hz, kind="tone", offset_hz=40.0), level_dbfs=level_dbfs, name=name)
        for name, at_hz, level_dbfs in (("noise", -10_000.0, -199.0), ("tone", 10_000.0, -30.0))
    )
    _, receiver, _ = receive(Scene(48_000.0, 1e6, 10.0, stations, seed=6, noise_dbfs_hz=-90.0), "align=speech")
    for place in range(2):
        group, row = receiver.group_of(place)
        assert receiver.figures(place).carrier_offset_hz is None
        assert group.locked_fraction(row) == 0.0
        assert "no voice to align by" in group.detector(row)[1]


def test_noise_alone_is_never_a_carrier():
    """Every kind of follower on noise: no lock is claimed, no offset is made up."""
    names = ("A3E", "R3E-USB", "DSB-SC", "QAM", "VSB-SC-USB")
    stations = tuple(
        replace(station(name, 1e6 + (k - 2) * 16_000.0), level_dbfs=-199.0) for k, name in enumerate(names)
    )
    _, receiver, _ = receive(Scene(96_000.0, 1e6, 12.0, stations, seed=8, noise_dbfs_hz=-90.0))
    for place in range(len(names)):
        group, row = receiver.group_of(place)
        assert group.locked_fraction(row) == 0.0
        assert receiver.figures(place).carrier_offset_hz is None
        assert receiver.figures(place).carrier_to_noise_density_dbhz is None
