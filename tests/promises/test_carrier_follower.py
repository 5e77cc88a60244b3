"""What the carrier followers promise: the stream's contract, honest locks, and no harm from anything that comes in."""

from __future__ import annotations

import itertools
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import butter, hilbert, resample_poly, sosfiltfilt

from rxchain.carrier.follower import CarrierFollower, Follower, FollowerSettings, NominalFollower, make_follower
from rxchain.carrier.track import Follow, Lock, Track, Turned
from rxchain.errors import SettingError

SPEECH = Path(__file__).resolve().parents[3] / "shared" / "recordings" / "speech"
RATE_HZ = 12_000.0
AMPLITUDE = 0.1
EVERY = [Follow.CARRIER, Follow.PILOT, Follow.SQUARE, Follow.FOURTH_POWER, Follow.NOMINAL]
LINES = EVERY[:-1]

Complex = NDArray[np.complex128]
Floats = NDArray[np.float64]


def white(rng: np.random.Generator, channels: int, n: int, density: float, rate_hz: float = RATE_HZ) -> Complex:
    pairs = rng.standard_normal((2, channels, n))
    return np.sqrt(density * rate_hz / 2) * (pairs[0] + 1j * pairs[1])


def at_cn0(signal: Complex, cn0_dbhz: float, rng: np.random.Generator) -> Complex:
    density = AMPLITUDE**2 / 10 ** (cn0_dbhz / 10)
    return AMPLITUDE * signal + white(rng, *signal.shape, density)


def tones(rng: np.random.Generator, channels: int, seconds: float, drift_hz_s: float = 0.0) -> tuple[Complex, Floats]:
    """Carriers at random offsets: samples, and offsets in Hz, ``(channels, 1)``."""
    t = np.arange(int(seconds * RATE_HZ)) / RATE_HZ
    offset_hz = rng.uniform(-200.0, 200.0, (channels, 1))
    cycles = rng.uniform(0.0, 1.0, (channels, 1)) + offset_hz * t + 0.5 * drift_hz_s * t**2
    return np.exp(2j * np.pi * cycles), offset_hz


def speech(channels: int, seconds: float, low_hz: float, high_hz: float) -> Floats:
    """Recorded voices, a different stretch a channel, peak 1."""
    soundfile = pytest.importorskip("soundfile")
    if not SPEECH.is_dir():
        pytest.skip(f"no recorded voices in {SPEECH}")
    band = butter(4, (low_hz, high_hz), "bandpass", fs=RATE_HZ, output="sos")
    voices = []
    for c in range(channels):
        audio, rate = soundfile.read(SPEECH / ("woman-30s-8k.wav", "man-7s-16k.wav")[c % 2])
        audio = sosfiltfilt(band, resample_poly(audio, int(RATE_HZ), rate))
        audio = np.resize(np.roll(audio, -int(2.1 * c * RATE_HZ)), int(seconds * RATE_HZ))
        voices.append(audio / np.abs(audio).max())
    return np.array(voices)


def run(follower: Follower, iq: NDArray[np.complexfloating], cuts: list[int] | None = None) -> Turned:
    """Everything a follower makes of a signal, in one piece."""
    iq = iq.astype(np.complex64)
    edges = [0, *np.cumsum(cuts or [4096] * (iq.shape[1] // 4096)), iq.shape[1]]
    pieces = [follower.process(iq[:, a:b]) for a, b in itertools.pairwise(edges)]
    pieces.append(follower.flush())
    names = ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")
    track = Track(*(np.concatenate([getattr(piece.track, name) for piece in pieces], axis=1) for name in names))
    return Turned(np.concatenate([piece.iq for piece in pieces], axis=1), track, follower.hop_samples)


def follow(iq: Complex, kind: Follow, sides: list[int] | None = None, **settings: object) -> Turned:
    return run(make_follower(FollowerSettings(kind, **settings), len(iq), RATE_HZ, sides), iq)  # type: ignore[arg-type]


def hop_times(turned: Turned) -> Floats:
    return ((np.arange(turned.track.lock.shape[1]) + 0.5) * turned.hop_samples - 0.5) / RATE_HZ


def first_lock_s(turned: Turned) -> Floats:
    locked = turned.track.lock == Lock.LOCKED
    return np.where(locked.any(axis=1), locked.argmax(axis=1) * turned.hop_samples / RATE_HZ, np.inf)


# --- the stream's contract ---------------------------------------------------------------------------------------------


def some_signal(kind: Follow, rate_hz: float, n: int, channels: int = 3) -> Complex:
    rng = np.random.default_rng(5)
    t = np.arange(n) / rate_hz
    message = np.repeat(rng.standard_normal(n // 5 + 1), 5)[:n] if kind is Follow.SQUARE else np.ones(n)
    offsets_hz = np.array([[-31.0], [0.4], [77.0]])[:channels]
    return AMPLITUDE * message * np.exp(2j * np.pi * offsets_hz * t) + white(rng, channels, n, 1e-7, rate_hz)


@pytest.mark.parametrize("kind", EVERY)
def test_any_split_gives_the_same_bits(kind: Follow) -> None:
    iq = some_signal(kind, RATE_HZ, 40_123)
    whole = run(make_follower(FollowerSettings(kind), 3, RATE_HZ), iq, [])
    rng = np.random.default_rng(6)
    for longest in (700, 5000):
        cuts: list[int] = []
        while sum(cuts) < iq.shape[1] - longest:
            cuts.append(int(rng.integers(0, longest)))
        parts = run(make_follower(FollowerSettings(kind), 3, RATE_HZ), iq, cuts)
        assert np.array_equal(parts.iq, whole.iq)
        for name in ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock"):
            assert np.array_equal(getattr(parts.track, name), getattr(whole.track, name)), name


@pytest.mark.parametrize("rate_hz", [8e3, 12_001.1321, 16e3, 24e3, 48e3])
@pytest.mark.parametrize("kind", EVERY)
def test_as_much_comes_out_as_went_in_at_any_rate(kind: Follow, rate_hz: float) -> None:
    n = int(0.9 * rate_hz) + 17
    follower = make_follower(FollowerSettings(kind), 3, rate_hz)
    turned = run(follower, some_signal(kind, rate_hz, n), [n // 3, 0, n // 3])
    assert turned.iq.shape == (3, n)
    assert turned.track.lock.shape == (3, -(-n // turned.hop_samples))
    assert 0.004 < turned.hop_samples / rate_hz < 0.0065  # about 5.3 ms
    assert follower.flush().iq.shape == (3, 0)


@pytest.mark.parametrize("kind", EVERY)
def test_streaming_lags_by_no_more_than_it_says(kind: Follow) -> None:
    follower = make_follower(FollowerSettings(kind), 3, RATE_HZ)
    iq = some_signal(kind, RATE_HZ, 9000).astype(np.complex64)
    out = longest = 0
    for k in range(0, 9000, 41):
        turned = follower.process(iq[:, k : k + 41])
        assert turned.iq.shape[1] == turned.track.lock.shape[1] * follower.hop_samples
        out += turned.iq.shape[1]
        longest = max(longest, min(k + 41, 9000) - out)
    assert longest <= follower.delay_samples
    assert longest > follower.delay_samples - 41 - follower.hop_samples


@pytest.mark.parametrize("kind", LINES)
@pytest.mark.parametrize("rate_hz", [8e3, 12e3, 16e3, 48e3])
def test_live_following_keeps_under_75_ms(kind: Follow, rate_hz: float) -> None:
    assert make_follower(FollowerSettings(kind, live=True), 1, rate_hz).delay_samples / rate_hz < 0.075


@pytest.mark.parametrize("kind", EVERY)
def test_reset_and_flush_leave_a_follower_as_new(kind: Follow) -> None:
    iq = some_signal(kind, RATE_HZ, 14_000)
    follower = make_follower(FollowerSettings(kind), 3, RATE_HZ)
    first = run(follower, iq)
    again = run(follower, iq)
    follower.process(iq[:, 3000:].astype(np.complex64))
    follower.reset()
    third = run(follower, iq)
    assert np.array_equal(first.iq, again.iq)
    assert np.array_equal(first.iq, third.iq)


@pytest.mark.parametrize("kind", EVERY)
def test_samples_are_turned_and_nothing_else(kind: Follow) -> None:
    iq = some_signal(kind, RATE_HZ, 40_000)
    turned = run(make_follower(FollowerSettings(kind), 3, RATE_HZ), iq)
    rounding = 2e-6  # a few float32 roundings
    assert np.allclose(np.abs(turned.iq), np.abs(iq), atol=0.0, rtol=rounding)


@pytest.mark.parametrize("kind", LINES)
def test_the_track_tells_the_phase_that_was_taken_out(kind: Follow) -> None:
    iq = some_signal(kind, RATE_HZ, 40_000)
    turned = run(make_follower(FollowerSettings(kind), 3, RATE_HZ), iq)
    hop = turned.hop_samples
    rotation = turned.iq * iq.conj() / np.abs(iq) ** 2
    middle = rotation[:, hop // 2 - 1 :: hop] + rotation[:, hop // 2 :: hop]  # the middle lies between two samples
    error = np.angle(middle * np.exp(2j * np.pi * turned.track.phase_cycles[:, : middle.shape[1]]))
    rounding = 1e-4
    assert np.abs(error).max() < rounding


# --- nothing that comes in does harm --------------------------------------------------------------------------------


def hostile() -> dict[str, Complex]:
    rng = np.random.default_rng(3)
    n = 30_000
    t = np.arange(n) / RATE_HZ
    square = np.sign(np.sin(2 * np.pi * 210.0 * t) + 1e-9) + 0j
    burst = np.zeros(n, complex)
    burst[9000:9010] = 1.0 + 1.0j
    gated = np.exp(2j * np.pi * 40 * t) * ((t < 0.9) | (t > 1.6))
    tiny = 1e-15 * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
    named = {"zeros": 0 * square, "square wave": square, "burst": burst, "gap": gated, "tiny": tiny}
    return named | {"full scale": np.exp(2j * np.pi * 499.0 * t), "steady": np.ones(n, complex), "huge": 1e4 * square}


@pytest.mark.parametrize("kind", LINES)
@pytest.mark.parametrize("name", list(hostile()))
def test_nothing_makes_it_emit_anything_but_numbers(kind: Follow, name: str) -> None:
    iq = np.array([hostile()[name]] * 2)
    turned = follow(iq, kind)
    assert np.isfinite(turned.iq).all()
    for reading in ("offset_hz", "phase_cycles", "amplitude", "noise_density"):
        assert np.isfinite(getattr(turned.track, reading)).all(), reading


@pytest.mark.parametrize("kind", LINES)
def test_no_lock_is_claimed_in_noise(kind: Follow) -> None:
    turned = follow(white(np.random.default_rng(11), 30, int(12 * RATE_HZ), 1e-6), kind)
    assert np.all(turned.track.lock == Lock.NONE)
    assert np.all(turned.track.amplitude == 0.0)


def test_before_any_lock_the_channel_passes_untouched() -> None:
    iq = white(np.random.default_rng(12), 4, 30_000, 1e-6).astype(np.complex64)
    turned = follow(iq, Follow.CARRIER)
    assert np.allclose(turned.iq, iq, rtol=1e-6, atol=0.0)


# --- locking, holding, letting go -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "cn0_dbhz", "within_s"),
    [
        (Follow.CARRIER, 60, 0.5),
        (Follow.CARRIER, 30, 0.5),
        (Follow.PILOT, 60, 1.0),
        (Follow.PILOT, 40, 1.0),
        (Follow.PILOT, 25, 2.0),
    ],
)
def test_lock_comes_in_time(kind: Follow, cn0_dbhz: float, within_s: float) -> None:
    rng = np.random.default_rng(20)
    tone, offset_hz = tones(rng, 16, 3.0)
    turned = follow(at_cn0(tone, cn0_dbhz, rng), kind)
    assert first_lock_s(turned).max() <= within_s
    assert np.abs(turned.track.offset_hz[:, -60:] - offset_hz).max() < 1.0


@pytest.mark.parametrize("kind", [Follow.CARRIER, Follow.PILOT])
@pytest.mark.parametrize("cn0_dbhz", [30, 50, 70])
def test_loss_is_reported_within_600_ms(kind: Follow, cn0_dbhz: float) -> None:
    rng = np.random.default_rng(21)
    tone, _ = tones(rng, 8, 8.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    turned = follow(at_cn0(tone * (t < 3.0), cn0_dbhz, rng), kind)
    lock, when = turned.track.lock, hop_times(turned)
    assert np.mean(lock[:, (when > 2.0) & (when < 2.85)] == Lock.LOCKED) > 0.99
    late = ((lock == Lock.LOCKED) & (when > 3.0)).sum(axis=1) * turned.hop_samples / RATE_HZ
    assert late.max() < 0.6
    assert np.all(lock[:, (when > 3.7) & (when < 4.5)] == Lock.HELD)
    assert np.all(lock[:, when > 7.5] == Lock.NONE)


@pytest.mark.parametrize("kind", [Follow.CARRIER, Follow.PILOT])
def test_a_gap_of_zeros_is_flown_through(kind: Follow) -> None:
    rng = np.random.default_rng(22)
    tone, offset_hz = tones(rng, 8, 6.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    iq = at_cn0(tone, 45, rng)
    iq[:, (t > 2.5) & (t < 4.0)] = 0.0
    turned = follow(iq, kind)
    when = hop_times(turned)
    inside = (when > 3.2) & (when < 3.8)
    assert np.all(turned.track.lock[:, inside] == Lock.HELD)
    assert np.abs(turned.track.offset_hz[:, inside] - offset_hz).max() < 0.3
    assert np.all(turned.track.lock[:, (when > 4.2) & (when < 5.8)] == Lock.LOCKED)


@pytest.mark.parametrize(("floor", "length_s"), [(0.15, 0.1), (0.15, 0.2), (0.0, 0.5)])
def test_a_keyed_carrier_keeps_its_lock(floor: float, length_s: float) -> None:
    rng = np.random.default_rng(23)
    tone, _ = tones(rng, 8, 9.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    keyed = np.where((t + 0.3) % 1.0 < length_s, floor, 1.0)
    turned = follow(at_cn0(tone * keyed, 50, rng), Follow.CARRIER)
    when = hop_times(turned)
    later = (when > 2.0) & (when < 8.8)
    up = later & ((when + 0.3) % 1.0 > length_s + 0.1)
    assert np.all(turned.track.lock[:, up] == Lock.LOCKED)
    assert np.all(turned.track.lock[:, later] != Lock.NONE)


def test_a_late_carrier_is_upright_from_its_first_locked_hop() -> None:
    rng = np.random.default_rng(24)
    tone, _ = tones(rng, 8, 4.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    turned = follow(at_cn0(tone * (t > 1.3), 60, rng), Follow.CARRIER)
    hop = turned.hop_samples
    angle_deg = np.degrees(np.angle(turned.iq.reshape(8, -1, hop).mean(axis=2)))
    for c, locked in enumerate(turned.track.lock == Lock.LOCKED):
        first = int(locked.argmax())
        assert 1.3 < first * hop / RATE_HZ < 1.8
        assert np.abs(angle_deg[c, first : first + 40]).max() < 5.0


@pytest.mark.parametrize("kind", [Follow.CARRIER, Follow.PILOT])
def test_a_drift_of_20_hz_a_second_is_followed(kind: Follow) -> None:
    rng = np.random.default_rng(25)
    tone, offset_hz = tones(rng, 8, 6.0, drift_hz_s=20.0)
    turned = follow(at_cn0(tone, 35, rng), kind)
    when = hop_times(turned)
    steady = (when > 2.0) & (when < 5.8)
    assert np.all(turned.track.lock[:, steady] == Lock.LOCKED)
    assert np.abs(turned.track.offset_hz - offset_hz - 20.0 * when)[:, steady].max() < 0.3


def test_a_wrong_frequency_after_a_deep_fade_is_put_right() -> None:
    """The carrier comes back 6 Hz away: farther than the filter pulls in by itself before the watch steps in."""
    rng = np.random.default_rng(26)
    t = np.arange(int(7 * RATE_HZ)) / RATE_HZ
    moved_hz = np.where(t < 3.0, 20.0, 26.0)
    tone = np.exp(2j * np.pi * np.cumsum(moved_hz) / RATE_HZ)[None].repeat(6, axis=0)
    turned = follow(at_cn0(tone * ((t < 3.0) | (t > 4.0)), 40, rng), Follow.CARRIER)
    when = hop_times(turned)
    after = (when > 5.2) & (when < 6.8)
    assert np.all(turned.track.lock[:, after] == Lock.LOCKED)
    assert np.abs(turned.track.offset_hz[:, after] - 26.0).max() < 0.5


# --- pilots beside speech, tones beside pilots ----------------------------------------------------------------------


@pytest.mark.parametrize("level_db", [-16, -18, -20, -26])
@pytest.mark.parametrize("low_hz", [100.0, 300.0])
def test_a_pilot_is_followed_beside_full_speech(level_db: float, low_hz: float) -> None:
    rng = np.random.default_rng(30)
    sideband = hilbert(speech(6, 7.0, low_hz, 2700.0))
    sideband /= np.abs(sideband).max(axis=1, keepdims=True)
    pilot = 10 ** (level_db / 20)
    message = (1.0 - pilot) * sideband
    density = float(np.mean(np.abs(message) ** 2)) / 10.0 / 2400.0  # 10 dB
    tone, offset_hz = tones(rng, 6, 7.0)
    iq = AMPLITUDE * (tone * (pilot + message) + white(rng, *tone.shape, density))
    turned = follow(iq, Follow.PILOT, [1] * 6, message_hz=(low_hz, 2700.0))
    when = hop_times(turned)
    late = (when > 1.0) & (when < 6.8)
    assert np.mean(turned.track.lock[:, late] == Lock.LOCKED) > 0.999
    assert np.abs(turned.track.offset_hz[:, late] - offset_hz).max() < 0.5


@pytest.mark.parametrize(("side", "tone_hz"), [(1, 1000.0), (1, 400.0), (-1, -400.0), (0, 700.0)])
def test_a_steady_tone_stronger_than_the_pilot_is_not_taken_for_it(side: int, tone_hz: float) -> None:
    rng = np.random.default_rng(31)
    tone, offset_hz = tones(rng, 8, 2.5)
    t = np.arange(tone.shape[1]) / RATE_HZ
    iq = AMPLITUDE * tone * (0.1 + np.exp(2j * np.pi * tone_hz * t)) + white(rng, *tone.shape, 1e-8)
    turned = follow(iq, Follow.PILOT, [side] * 8)
    assert np.all(turned.track.lock[:, -60:-30] == Lock.LOCKED)
    assert np.abs(turned.track.offset_hz[:, -60:-30] - offset_hz).max() < 0.5


@pytest.mark.parametrize("kind", [Follow.CARRIER, Follow.PILOT])
@pytest.mark.parametrize("stronger_db", [12.0, 40.0])
def test_a_much_stronger_carrier_takes_over_from_a_spurious_line(kind: Follow, stronger_db: float) -> None:
    rng = np.random.default_rng(32)
    t = np.arange(int(5 * RATE_HZ)) / RATE_HZ
    spurious = AMPLITUDE / 10 ** (stronger_db / 20)
    iq = spurious * np.exp(2j * np.pi * 240.0 * t) + AMPLITUDE * np.exp(2j * np.pi * -35.0 * t) * (t > 2.5)
    iq = iq + white(rng, 9, len(t), spurious**2 / 10**3.5)
    turned = follow(iq, kind, [1] * 9)
    when = hop_times(turned)
    # A channel has its turn every 0.7 s, and what comes up must stay for nearly half a second.
    before, after = (when > 1.5) & (when < 2.4), (when > 4.1) & (when < 4.8)
    assert np.all(turned.track.lock[:, before | after] == Lock.LOCKED)
    assert np.abs(turned.track.offset_hz[:, before] - 240.0).max() < 1.0
    assert np.abs(turned.track.offset_hz[:, after] + 35.0).max() < 1.0


@pytest.mark.parametrize(("side", "tone_hz"), [(1, 420.0), (0, -320.0)])
def test_a_tone_that_begins_late_does_not_take_over_from_a_pilot(side: int, tone_hz: float) -> None:
    rng = np.random.default_rng(33)
    tone, offset_hz = tones(rng, 9, 4.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    message = np.exp(2j * np.pi * tone_hz * t) * (t > 2.0)
    iq = AMPLITUDE * tone * (0.05 + message) + white(rng, *tone.shape, 1e-9)
    turned = follow(iq, Follow.PILOT, [side] * 9)
    late = hop_times(turned) > 1.5
    assert np.all(turned.track.lock[:, late][:, :-30] == Lock.LOCKED)
    assert np.abs(turned.track.offset_hz[:, late] - offset_hz)[:, :-30].max() < 1.0


# --- suppressed carriers --------------------------------------------------------------------------------------------


def half_turns(turned: Turned, tone: Complex, message: Floats, after_s: float) -> tuple[Floats, NDArray[np.bool_]]:
    """Phase error folded to half a turn where the message is loud, degrees; and on which half each loud hop lies."""
    hop = turned.hop_samples
    hops = message.shape[1] // hop
    middle = tone[:, hop // 2 - 1 : hops * hop : hop] + tone[:, hop // 2 : hops * hop : hop]
    error = turned.track.phase_cycles[:, :hops] - np.angle(middle) / (2 * np.pi)
    power = (message[:, : hops * hop] ** 2).reshape(len(message), hops, hop).mean(axis=2)
    loud = (power > 0.1 * power.mean(axis=1, keepdims=True)) & (hop_times(turned)[:hops] > after_s)
    folded = 180.0 * (2.0 * error - np.rint(2.0 * error))
    turned_over = np.abs(error - np.rint(error)) > 0.25
    return np.where(loud, folded, np.nan), np.where(loud, turned_over, np.nan)


@pytest.mark.parametrize("fade_s", [0.0, 2.0])
def test_a_suppressed_carrier_keeps_its_half_turn(fade_s: float) -> None:
    rng = np.random.default_rng(40)
    message = speech(6, 11.0, 300.0, 2700.0)
    tone, _ = tones(rng, 6, 11.0)
    t = np.arange(tone.shape[1]) / RATE_HZ
    fade = np.where((t > 5.0) & (t < 5.0 + fade_s), 0.01, 1.0)
    density = float(np.mean(message**2)) / 100.0 / 5400.0  # 20 dB
    iq = AMPLITUDE * (tone * message * fade + white(rng, *tone.shape, density))
    turned = follow(iq, Follow.SQUARE)
    assert first_lock_s(turned).max() <= 2.5
    folded, over = half_turns(turned, tone, message * fade, 2.8)
    assert np.sqrt(np.nanmean(folded**2)) < 2.0
    for row in over:
        assert len(np.unique(row[~np.isnan(row)])) == 1


def test_two_messages_in_quadrature_are_followed_by_the_fourth_power() -> None:
    rng = np.random.default_rng(41)
    message = speech(4, 8.0, 100.0, 4500.0)
    tone, offset_hz = tones(rng, 4, 8.0)
    iq = AMPLITUDE * tone * (message + 1j * np.roll(message, 1, axis=0)) + white(rng, *tone.shape, 1e-9)
    turned = follow(iq, Follow.FOURTH_POWER, message_hz=(100.0, 4500.0))
    when = hop_times(turned)
    late = (when > 4.5) & (when < 7.8)
    assert np.all(turned.track.lock[:, late] != Lock.NONE)
    assert np.abs(turned.track.offset_hz[:, late] - offset_hz).max() < 0.5


# --- the nominal frequency, and what is refused ---------------------------------------------------------------------


def test_nominal_followers_turn_by_a_shift_a_channel_and_may_change_it() -> None:
    t = np.arange(6000) / RATE_HZ
    iq = np.exp(2j * np.pi * np.array([[35.0], [-12.5]]) * t).astype(np.complex64)
    follower = make_follower(FollowerSettings(Follow.NOMINAL), 2, RATE_HZ, shift_hz=np.array([35.0, -12.5]))
    assert isinstance(follower, NominalFollower)
    assert follower.delay_samples < follower.hop_samples
    first = follower.process(iq[:, :3008])
    follower.shift_hz = np.array([0.0, -12.5])
    second = follower.process(iq[:, 3008:])
    turned = np.concatenate([first.iq, second.iq], axis=1)
    rounding = 1e-4
    assert np.allclose(turned[1], turned[1, 0], atol=rounding)
    assert np.allclose(turned[0, :3008], turned[0, 0], atol=rounding)
    assert abs(np.angle(turned[0, 3009] / turned[0, 3007])) < 2.1 * 2 * np.pi * 35.0 / RATE_HZ
    assert np.all(first.track.offset_hz[0] == 35.0)
    assert np.all(first.track.lock == Lock.NONE)


def test_what_cannot_be_followed_is_refused() -> None:
    with pytest.raises(SettingError, match="search_hz=0"):
        FollowerSettings(Follow.CARRIER, search_hz=0.0)
    with pytest.raises(SettingError, match="message_hz"):
        FollowerSettings(Follow.CARRIER, message_hz=(2700.0, 300.0))
    with pytest.raises(SettingError, match="sides"):
        make_follower(FollowerSettings(Follow.PILOT), 2, RATE_HZ, [1])
    with pytest.raises(SettingError, match="shift_hz"):
        make_follower(FollowerSettings(Follow.CARRIER), 1, RATE_HZ, shift_hz=np.zeros(1))
    with pytest.raises(SettingError, match="shift_hz"):
        make_follower(FollowerSettings(Follow.NOMINAL), 2, RATE_HZ, shift_hz=np.zeros(1))
    with pytest.raises(SettingError, match="iq="):
        CarrierFollower(FollowerSettings(Follow.CARRIER), 2, RATE_HZ).process(np.zeros((1, 5), np.complex64))
