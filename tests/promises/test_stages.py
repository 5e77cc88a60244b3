"""What every stage promises, asked of every stage: a new one joins the registry and is asked the same."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from rxchain.audio.gain_control import GainControl, GainSettings
from rxchain.audio.rate_conversion import RateConverter
from rxchain.audio.squelch import Squelch
from rxchain.carrier.fallback import FallbackFollower
from rxchain.carrier.follower import CarrierFollower, FollowerSettings, make_follower
from rxchain.carrier.track import Follow, Turned
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.envelope import EnvelopeDetector, emission_band
from rxchain.detectors.sidebands import both_sidebands, one_sideband, quarter_turned
from rxchain.emissions import Side

RATE_HZ = 12_000.0
N = 9_000  # three quarters of a second: several quanta of every stage
CHANNELS = 3
BAND = both_sidebands(300.0, 2_700.0, RATE_HZ)


@dataclass(frozen=True)
class Entry:
    """make: a new stage for so many channels. shape: of its input but for the samples. Outputs per input sample: ratio."""

    make: Callable[[int], Any]
    shape: Callable[[int], tuple[int, ...]]
    dtype: type
    out_dtype: type
    ratio: float = 1.0


def iq(channels: int) -> tuple[int, ...]:
    return (channels,)


def audio(channels: int) -> tuple[int, ...]:
    return (channels, 2)


def follower(follow: Follow) -> Callable[[int], Any]:
    return lambda channels: make_follower(FollowerSettings(follow), channels, RATE_HZ)


def fallback(channels: int) -> FallbackFollower:
    return FallbackFollower(
        *(CarrierFollower(FollowerSettings(f), channels, RATE_HZ) for f in (Follow.PILOT, Follow.SQUARE))
    )


STAGES: dict[str, Entry] = {
    "coherent, real taps": Entry(
        lambda c: CoherentDetector(BAND[None, None], c), iq, np.complex64, np.float32
    ),
    "coherent, one sideband": Entry(
        lambda c: CoherentDetector(one_sideband(Side.LOWER, 300.0, 2_700.0, RATE_HZ)[None, None], c),
        iq, np.complex64, np.float32,
    ),
    "coherent, two messages": Entry(
        lambda c: CoherentDetector(np.stack([BAND, quarter_turned(BAND)])[None], c), iq, np.complex64, np.float32
    ),
    **{
        f"envelope, {times} times": Entry(
            lambda c, times=times: EnvelopeDetector(
                [emission_band(-2_700.0, 2_700.0, RATE_HZ)] * c, [BAND] * c, oversampling=times
            ),
            iq, np.complex64, np.float32,
        )
        for times in (1, 2, 4)
    },
    "automatic gain": Entry(
        lambda c: GainControl(GainSettings(), np.full(c, np.nan), 2, RATE_HZ), audio, np.float32, np.float32
    ),
    "fixed gain": Entry(
        lambda c: GainControl(GainSettings(), np.full(c, -6.0), 2, RATE_HZ), audio, np.float32, np.float32
    ),
    "rate conversion": Entry(
        lambda c: RateConverter(c, 2, 12_345.67, 12_000.0), audio, np.float32, np.float32, ratio=12_000.0 / 12_345.67
    ),
    "squelch": Entry(
        lambda c: Squelch([((300.0, 2_700.0),)] * c, RATE_HZ, 4_900.0, np.full(c, np.nan)),
        iq, np.complex64, np.bool_, ratio=1.0 / 128.0,
    ),
    **{f"follower, {one.value}": Entry(follower(one), iq, np.complex64, np.complex64) for one in Follow},
    "follower, fallback": Entry(fallback, iq, np.complex64, np.complex64),
}  # fmt: skip


def signal(entry: Entry, channels: int = CHANNELS, seed: int = 5) -> np.ndarray:
    """A carrier with a noisy message, a different one in each channel, so that every path of a stage has work."""
    rng = np.random.default_rng(seed)
    shape = (*entry.shape(channels), N)
    t = np.arange(N) / RATE_HZ
    if entry.dtype is np.float32:
        return (0.1 * rng.standard_normal(shape)).astype(np.float32)
    carrier = np.exp(2j * np.pi * (3.0 + np.arange(channels)[:, None]) * t)
    noise = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    return ((1.0 + 0.5 * np.cos(2 * np.pi * 700.0 * t)) * carrier + 0.02 * noise).astype(np.complex64)


def plain(output: Any) -> np.ndarray:
    return output.iq if isinstance(output, Turned) else output


def run(stage: Any, pieces: list[np.ndarray]) -> np.ndarray:
    parts = [plain(stage.process(piece)) for piece in pieces]
    return np.concatenate([*parts, plain(stage.flush())], axis=-1)


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
    stage = entry.make(CHANNELS)
    run(stage, [signal(entry, seed=9)])
    stage.reset()
    np.testing.assert_array_equal(run(stage, [block]), run(entry.make(CHANNELS), [block]))


@each_stage
def test_a_second_flush_is_empty(name: str) -> None:
    entry = STAGES[name]
    stage = entry.make(CHANNELS)
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


# A transform over more rows may order its sums otherwise: single precision, some hundred terms.
ACROSS_CHANNELS = 2e-5


@each_stage
def test_channels_do_not_influence_each_other(name: str) -> None:
    entry = STAGES[name]
    block = signal(entry)
    together = run(entry.make(CHANNELS), [block])
    for k in range(CHANNELS):
        alone = run(entry.make(1), [block[k : k + 1]])
        if alone.dtype == np.bool_:
            np.testing.assert_array_equal(alone[0], together[k])
        else:
            np.testing.assert_allclose(alone[0], together[k], rtol=0, atol=ACROSS_CHANNELS)


@pytest.mark.parametrize("name", [n for n in STAGES if n.startswith(("coherent", "envelope", "fixed"))])
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
