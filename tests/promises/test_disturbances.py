"""What a bad moment leaves behind: nothing, once a stage's memory is over."""

from __future__ import annotations

import numpy as np
import pytest
from scenes import run_blocks
from stages import ACROSS_CHANNELS, CHANNELS, RATE_HZ, STAGES, STEP, named, run, signal, wideband

from rxchain.carrier.track import Lock
from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.sample_formats import CF32, LARGEST_SAMPLE
from rxchain.streams import Block

WORST = {
    "not a number": lambda n: np.full(n, np.nan),
    "infinite": lambda n: np.full(n, np.inf),
    # Far over everything a converter gives, and still a number whose square single precision cannot hold.
    "absurdly large": lambda n: np.full(n, 1e25),
    "the largest that sources let through": lambda n: np.full(n, LARGEST_SAMPLE),
    "full-scale square wave": lambda n: np.sign(np.sin(2 * np.pi * 210.0 * np.arange(n) / RATE_HZ) + 1e-9),
}
FILTERS = named("coherent", "envelope", "fixed", "rate", "gate", "switch", "channel bank")
MEMORY_S = 0.11  # the longest filter and a quantum
each_disturbance = pytest.mark.parametrize("worst", WORST)


@pytest.mark.parametrize("name", FILTERS)
@each_disturbance
@pytest.mark.filterwarnings("ignore::RuntimeWarning")  # of numbers that are none
def test_a_filter_forgets_a_disturbance_after_its_memory(name: str, worst: str) -> None:
    """The other channels are not touched by it at all; the bank's channels share their input."""
    entry = STAGES[name]
    block = signal(entry)
    disturbed = block.copy()
    first = disturbed if entry.shape is wideband else disturbed[0]
    first[..., 2_000:2_400] = WORST[worst](400)
    output, clean = run(entry.make(CHANNELS), [disturbed]), run(entry.make(CHANNELS), [block])
    after = int((2_400 + MEMORY_S * RATE_HZ) * entry.ratio)
    # The bank's rate is four times the channels', so its memory is the shorter.
    np.testing.assert_allclose(output[..., after:], clean[..., after:], rtol=0, atol=ACROSS_CHANNELS)
    if entry.shape is not wideband:
        np.testing.assert_array_equal(output[1:], clean[1:])


@each_disturbance
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_a_squelch_shuts_after_a_disturbance(worst: str) -> None:
    """A second after the last of it, as after a signal."""
    rng = np.random.default_rng(29)
    block = (0.01 * (rng.standard_normal((1, 36_000)) + 1j * rng.standard_normal((1, 36_000)))).astype(np.complex64)
    block[0, 6_000:9_000] = WORST[worst](3_000)
    steps = run(STAGES["squelch"].make(1), [block])[0]
    if worst.startswith("full"):
        assert steps[6_000 // STEP : 9_000 // STEP].any()
    assert not steps[int((9_000 + 1.15 * RATE_HZ) / STEP) :].any()


# Loops and peak holds would keep for ever what filters forget, if they let it in.
each_disturbance_of_memories = pytest.mark.parametrize(
    "worst", ["not a number", "the largest that sources let through", "full-scale square wave"]
)


@pytest.mark.parametrize(
    "worst", ["not a number", "infinite", "the largest that sources let through", "full-scale square wave"]
)
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_automatic_gain_comes_back_after_a_disturbance(worst: str) -> None:
    """At 20 dB a second; here the audio is 9 dB under a full-scale disturbance, 89 dB under the largest."""
    entry = STAGES["automatic gain"]
    wait_s = 5.0 if worst.startswith("the") else 1.0
    block = np.tile(signal(entry, 1), 9)
    disturbed = block.copy()
    disturbed[..., 2_000:2_400] = WORST[worst](400)
    output, clean = run(entry.make(1), [disturbed]), run(entry.make(1), [block])
    after = 2_400 + int(wait_s * RATE_HZ)
    np.testing.assert_allclose(output[..., after:], clean[..., after:], rtol=0, atol=1e-3)


def followed(kind: str, n: int) -> np.ndarray:
    """Something for each kind of follower to hold on to, at +7.3 Hz and a tenth of full scale, in little noise."""
    rng = np.random.default_rng(31)
    t = np.arange(n) / RATE_HZ
    first, second = np.cos(2 * np.pi * 700.0 * t), np.cos(2 * np.pi * 1_130.0 * t)
    message = {"square": first, "fourth power": first + 1j * second}.get(kind, 1.0 + 0.5 * first)
    noise = 0.01 * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
    return (0.1 * (message * np.exp(2j * np.pi * 7.3 * t) + noise)).astype(np.complex64)[None]


BACK_S = 1.0  # measured: frequency within 0.1 Hz at once, the square after 0.7 s
WRONG_HZ, REPORTED_S = 0.5, 0.6
STRANGER_BACK_S = 8.0  # held for 3 s, then searched for anew
LINES = [name for name in named("follower") if "nominal" not in name]


@pytest.mark.parametrize("name", LINES)
@each_disturbance_of_memories
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_a_follower_follows_again_after_a_disturbance(name: str, worst: str) -> None:
    begins, ends = 5 * int(RATE_HZ), 5 * int(RATE_HZ) + 3_000
    n = ends + int((BACK_S + 1.0) * RATE_HZ)
    block = followed(name.removeprefix("follower, "), n)
    block[0, begins:ends] = WORST[worst](ends - begins)
    stage = STAGES[name].make(1)
    pieces = [stage.process(block), stage.flush()]
    lock = np.concatenate([piece.track.lock[0] for piece in pieces])
    offset_hz = np.concatenate([piece.track.offset_hz[0] for piece in pieces])
    # No claim while it is wrong, but for the time in which a loss must be reported.
    wrong = (lock == Lock.LOCKED) & (np.abs(offset_hz - 7.3) > WRONG_HZ)
    wrong[: begins // stage.hop_samples - 50] = False
    assert np.sum(wrong) * stage.hop_samples / RATE_HZ < REPORTED_S
    before, after = begins // stage.hop_samples - 50, int((ends + BACK_S * RATE_HZ) // stage.hop_samples)
    if lock[before] != Lock.LOCKED:
        pytest.fail("never followed, so nothing is shown")
    assert (lock[after:] == Lock.LOCKED).all()
    np.testing.assert_allclose(offset_hz[after:], 7.3, atol=0.1)


@pytest.mark.parametrize("name", LINES)
def test_a_disturbance_that_lasts_is_believed_and_left_again(name: str) -> None:
    """Three seconds of another, stronger signal may be followed; after it a wrong claim is over within 0.6 s."""
    begins, ends = 5 * int(RATE_HZ), 8 * int(RATE_HZ)
    n = ends + int((STRANGER_BACK_S + 1.0) * RATE_HZ)
    block = followed(name.removeprefix("follower, "), n)
    block[0, begins:ends] = WORST["full-scale square wave"](ends - begins)
    stage = STAGES[name].make(1)
    pieces = [stage.process(block), stage.flush()]
    lock = np.concatenate([piece.track.lock[0] for piece in pieces])
    offset_hz = np.concatenate([piece.track.offset_hz[0] for piece in pieces])
    over, back = ends // stage.hop_samples, int((ends + STRANGER_BACK_S * RATE_HZ) // stage.hop_samples)
    wrong = (lock[over:] == Lock.LOCKED) & (np.abs(offset_hz[over:] - 7.3) > WRONG_HZ)
    assert np.sum(wrong) * stage.hop_samples / RATE_HZ < REPORTED_S
    assert (lock[back:] == Lock.LOCKED).all()
    np.testing.assert_allclose(offset_hz[back:], 7.3, atol=0.1)


@pytest.mark.parametrize("value", [np.nan, np.inf, 10.0, float(LARGEST_SAMPLE), 1e25])
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_bad_samples_of_a_recording_do_no_lasting_harm(value: float) -> None:
    """A floating-point file with samples that are no numbers, or absurd ones: a second later all is as without."""
    rate_hz, n = 48_000.0, 192_000
    t = np.arange(n) / rate_hz
    iq = 0.1 * (1.0 + 0.5 * np.cos(2 * np.pi * 700.0 * t)) * np.exp(2j * np.pi * 20.0 * t)
    info = SourceInfo("recording", "bad samples", rate_hz, 1e6, None, n)

    def received(samples: np.ndarray) -> np.ndarray:
        decoded, _ = CF32.decode(samples.astype(np.complex64).view(np.float32))
        receiver = Receiver(info, (channel_from_text("1MHz A3E squelch=off agc=off"),))
        return run_blocks(receiver, [Block(decoded, 0)])[0][0]

    disturbed = iq.copy()
    disturbed[90_000:90_020] = value
    later = slice(48_000 - 12_000, 48_000 - 1_000)
    whole, harmed = received(iq)[later], received(disturbed)[later]
    assert np.std(whole) == pytest.approx(0.05 / np.sqrt(2), rel=0.01)
    np.testing.assert_allclose(harmed, whole, rtol=0, atol=0.01 * float(np.std(whole)))


def test_a_short_whistle_does_not_take_a_carriers_place() -> None:
    """20 dB stronger, 210 Hz away, for a quarter of a second: another carrier would stay."""
    n = 9 * int(RATE_HZ)
    block = followed("carrier", n).astype(np.complex128)
    t = np.arange(n) / RATE_HZ
    whistling = (t >= 5.0) & (t < 5.25)
    block[0, whistling] += np.exp(-2j * np.pi * 210.0 * t[whistling])
    stage = STAGES["follower, carrier"].make(1)
    pieces = [stage.process(block.astype(np.complex64)), stage.flush()]
    lock, offset_hz = (np.concatenate([getattr(p.track, name)[0] for p in pieces]) for name in ("lock", "offset_hz"))
    after = int(4.5 * RATE_HZ) // stage.hop_samples
    assert (lock[after:] == Lock.LOCKED).all()
    np.testing.assert_allclose(offset_hz[after:], 7.3, atol=WRONG_HZ)
