"""What every stage promises, asked of every stage: a new one joins the registry and is asked the same."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stages import (
    ACROSS_CHANNELS,
    CHANNELS,
    OFFSETS_HZ,
    PLAN,
    RATE_HZ,
    STAGES,
    STEP,
    N,
    OneGroup,
    decisions,
    named,
    plain,
    run,
    signal,
    wideband,
)

from rxchain.audio.squelch import Gate
from rxchain.detectors.switch import DetectorSwitch

each_stage = pytest.mark.parametrize("name", STAGES)


@each_stage
@given(cuts=st.lists(st.integers(0, N), max_size=25))
@settings(max_examples=8, deadline=None)
def test_any_split_gives_the_same_stream(name: str, cuts: list[int]) -> None:
    entry = STAGES[name]
    block = signal(entry)
    whole = run(entry.make(CHANNELS), [block])
    split = run(entry.make(CHANNELS), np.split(block, sorted(cuts), axis=-1))
    assert whole.shape[-1] > 0
    np.testing.assert_array_equal(whole, split)


@each_stage
def test_as_much_comes_out_as_went_in(name: str) -> None:
    entry = STAGES[name]
    for n in (0, 1, 777, N):
        output = run(entry.make(CHANNELS), [signal(entry)[..., :n]])
        # A squelch decides for whole steps; a converter gives an output for each of its periods begun.
        assert abs(output.shape[-1] - n * entry.ratio) <= (1.0 if entry.ratio != 1.0 else 0.0)
        assert output.dtype == entry.out_dtype


@each_stage
def test_reset_is_as_good_as_new(name: str) -> None:
    entry = STAGES[name]
    block = signal(entry)
    new = run(entry.make(CHANNELS), [block])
    stage = entry.make(CHANNELS)
    run(stage, [signal(entry, seed=9)])
    stage.reset()
    np.testing.assert_array_equal(run(stage, [block]), new)
    stage.reset()
    stage.process(signal(entry, seed=11)[..., :4_567])  # in the middle of things
    stage.reset()
    np.testing.assert_array_equal(run(stage, [block]), new)


@pytest.mark.parametrize("name", named("follower"))
def test_a_flushed_follower_is_as_new(name: str) -> None:
    """As the followers' protocol says, with no reset asked for."""
    entry = STAGES[name]
    block = signal(entry)
    stage = entry.make(CHANNELS)
    run(stage, [signal(entry, seed=9)])
    np.testing.assert_array_equal(run(stage, [block]), run(entry.make(CHANNELS), [block]))


@each_stage
def test_a_second_flush_is_empty(name: str) -> None:
    entry = STAGES[name]
    stage = entry.make(CHANNELS)
    assert plain(stage.flush()).shape[-1] == 0  # nothing in, nothing out
    run(stage, [signal(entry)])
    assert plain(stage.flush()).shape[-1] == 0


@each_stage
def test_input_is_untouched_and_output_not_shared(name: str) -> None:
    entry = STAGES[name]
    block = signal(entry)
    before = block.copy()
    stage = entry.make(CHANNELS)
    first = plain(stage.process(block[..., : N // 2]))
    kept = first.copy()
    if first.dtype != np.bool_:
        first *= 3  # a caller may do with it what he likes
    rest = np.concatenate([plain(stage.process(block[..., N // 2 :])), plain(stage.flush())], axis=-1)
    np.testing.assert_array_equal(block, before)
    np.testing.assert_array_equal(np.concatenate([kept, rest], axis=-1), run(entry.make(CHANNELS), [block]))


@each_stage
def test_silence_gives_finite_output(name: str) -> None:
    entry = STAGES[name]
    output = run(entry.make(CHANNELS), [np.zeros_like(signal(entry))])
    assert np.isfinite(output).all()


@each_stage
def test_channels_do_not_influence_each_other(name: str) -> None:
    entry = STAGES[name]
    block = signal(entry)
    together = run(entry.make(CHANNELS), [block])
    for k in range(CHANNELS):
        own = block if entry.shape is wideband else block[k : k + 1]
        alone = run(entry.alone(k) if entry.alone else entry.make(1), [own])
        if alone.dtype == np.bool_:
            np.testing.assert_array_equal(alone[0], together[k])
        else:
            np.testing.assert_allclose(alone[0], together[k], rtol=0, atol=ACROSS_CHANNELS)


@pytest.mark.parametrize("name", named("coherent", "envelope", "fixed"))
def test_sample_k_out_is_the_instant_of_sample_k_in(name: str) -> None:
    """A burst comes out centred where it went in."""
    entry = STAGES[name]
    t = np.arange(N) / RATE_HZ
    centre = 4_321
    burst = np.exp(-(((t - centre / RATE_HZ) / 0.004) ** 2)) * np.cos(2 * np.pi * 1_000.0 * (t - centre / RATE_HZ))
    if entry.dtype is np.float32:
        block = np.broadcast_to(burst, (*entry.shape(1), N)).astype(np.float32)
    else:
        spectrum = np.fft.fft(burst)
        lower = np.conj(np.fft.ifft(np.where(np.fft.fftfreq(N) > 0, 2 * spectrum, 0)))
        block = (1.0 + (lower if "sideband" in name else 0.5 * burst))[None].astype(np.complex64)
    output = run(entry.make(1), [block]).reshape(-1, N)[0]
    energy = output.astype(float)[1_000:-1_000] ** 2
    at = 1_000 + np.sum(np.arange(len(energy)) * energy) / np.sum(energy)
    assert abs(at - centre) < 1.0


@pytest.mark.parametrize("name", named("follower"))
def test_followers_turn_samples_where_they_are(name: str) -> None:
    """The magnitude of each sample is that of the same sample of the input: turning leaves it."""
    entry = STAGES[name]
    block = signal(entry)
    single_precision = 1e-6
    np.testing.assert_allclose(np.abs(run(entry.make(CHANNELS), [block])), np.abs(block), rtol=single_precision)


@pytest.mark.parametrize("name", ["automatic gain", "fixed gain", "rate conversion", "gate", "switch"])
def test_an_impulse_of_audio_stays_at_its_instant(name: str) -> None:
    entry = STAGES[name]
    at = 4_200  # the gate is open there
    block = np.zeros((*entry.shape(1), N), np.float32)
    block[..., at] = 0.5
    output = run(entry.make(1), [block])
    assert abs(int(np.argmax(np.abs(output[0, 0]))) - at * entry.ratio) <= 0.5


def test_a_burst_stays_at_its_instant_in_the_bank() -> None:
    at, rate_hz = 4_321, PLAN.capture_rate_hz
    t = (np.arange(N) - at) / rate_hz
    burst = np.exp(-((t / 0.004) ** 2) + 2j * np.pi * OFFSETS_HZ[1] * t)
    energy = np.abs(run(OneGroup(OFFSETS_HZ[1:2]), [burst.astype(np.complex64)])[0].astype(complex)) ** 2
    centre = np.sum(np.arange(len(energy)) * energy) / np.sum(energy)
    assert centre == pytest.approx(at * STAGES["channel bank"].ratio, abs=0.01)


def test_a_squelch_opens_with_what_it_hears() -> None:
    """Not before the step in which the signal begins, and within its four averaged frames; shut a second after it."""
    rng = np.random.default_rng(17)
    n, begins, ends = 48_000, 12_345, 20_000
    t = np.arange(n) / RATE_HZ
    noise = 0.01 * (rng.standard_normal(n) + 1j * rng.standard_normal(n))
    tone = 0.3 * np.exp(2j * np.pi * 1_000.0 * t) * ((t >= begins / RATE_HZ) & (t < ends / RATE_HZ))
    steps = run(STAGES["squelch"].make(1), [(noise + tone)[None].astype(np.complex64)])[0]
    first, last = np.flatnonzero(steps)[[0, -1]]
    assert begins // STEP <= first <= begins // STEP + 4
    assert ends / STEP < last < (ends + 1.1 * RATE_HZ) / STEP
    assert steps[first : last + 1].all()


@pytest.mark.parametrize("name", named("coherent", "envelope", "automatic", "fixed", "rate"))
def test_streaming_runs_behind_by_the_delay_it_tells(name: str) -> None:
    """Right after a quantum is complete the output lags by ``delay_samples``, and never by less."""
    entry = STAGES[name]
    stage, block = entry.make(1), signal(entry, 1)
    piece = 16  # divides every quantum
    received, delivered, lags = 0, 0, []
    for k in range(0, N - piece, piece):
        received, delivered = received + piece, delivered + plain(stage.process(block[..., k : k + piece])).shape[-1]
        lags.append(received * entry.ratio - delivered)
    settled = lags[N // piece // 2 :]
    assert min(settled) == pytest.approx(stage.delay_samples, abs=0.0 if entry.ratio == 1.0 else piece)


@pytest.mark.parametrize("name", named("coherent", "envelope"))
def test_a_detector_that_rests_costs_the_others_nothing_and_comes_back(name: str) -> None:
    """Silence while it rests; right again once its delay has passed twice over; the other channels never notice."""
    entry = STAGES[name]
    block = signal(entry)
    everything = run(entry.make(CHANNELS), [block])
    stage = entry.make(CHANNELS)
    stage.active_rows = np.array([0, 2])
    resting = [stage.process(block[:, :5_000])]
    stage.active_rows = None
    heard = np.concatenate([*resting, stage.process(block[:, 5_000:]), stage.flush()], axis=-1)
    for row in (0, 2):
        np.testing.assert_allclose(heard[row], everything[row], rtol=0, atol=ACROSS_CHANNELS)
    assert not resting[0][1].any()
    back = 5_000 + 2 * stage.delay_samples
    np.testing.assert_allclose(heard[1, :, back:], everything[1, :, back:], rtol=0, atol=ACROSS_CHANNELS)


@given(
    audio_cuts=st.lists(st.integers(0, 2_000), max_size=8),
    other_cuts=st.lists(st.integers(0, 2_000), max_size=8),
    step_cuts=st.lists(st.integers(0, 15), max_size=6),
)
@settings(max_examples=12, deadline=None)
def test_decisions_and_audio_may_come_at_different_times(
    audio_cuts: list[int], other_cuts: list[int], step_cuts: list[int]
) -> None:
    """A gate and a switch wait for whichever is late."""
    rng = np.random.default_rng(23)
    one, other = rng.standard_normal((2, CHANNELS, 2, 2_000)).astype(np.float32)
    steps = decisions(range(CHANNELS), 0, 16)
    pieces = 1 + max(len(audio_cuts), len(other_cuts), len(step_cuts))

    def split(whole: np.ndarray, cuts: list[int]) -> list[np.ndarray]:
        parts = np.split(whole, sorted(cuts), axis=-1)
        return parts + [whole[..., :0]] * (pieces - len(parts))

    gated = Gate(CHANNELS, 2, STEP, RATE_HZ, np.array([False, True, False]))
    whole_gate = Gate(CHANNELS, 2, STEP, RATE_HZ, np.array([False, True, False])).process(one, steps.astype(bool))
    parts = zip(split(one, audio_cuts), split(steps.astype(bool), step_cuts), strict=True)
    np.testing.assert_array_equal(np.concatenate([gated.process(*pair) for pair in parts], axis=-1), whole_gate)
    switched = DetectorSwitch(CHANNELS, 2, 2, STEP, RATE_HZ)
    whole_switch = DetectorSwitch(CHANNELS, 2, 2, STEP, RATE_HZ).process([one, other], steps.astype(np.int8))
    three = zip(split(one, audio_cuts), split(other, other_cuts), split(steps.astype(np.int8), step_cuts), strict=True)
    output = [switched.process([first, second], choices) for first, second, choices in three]
    np.testing.assert_array_equal(np.concatenate(output, axis=-1), whole_switch)
    assert whole_gate.shape == whole_switch.shape == one.shape
    np.testing.assert_array_equal(whole_gate[1], one[1])  # one that is always open passes everything, exactly
