"""Every stage there is, with something to do: a registry for the tests of what all stages promise."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from rxchain.audio.gain_control import GainControl, GainSettings
from rxchain.audio.limiter import Limiter
from rxchain.audio.notch import ToneNotch
from rxchain.audio.rate_conversion import RateConverter
from rxchain.audio.squelch import Gate, Squelch
from rxchain.carrier.fallback import FallbackFollower
from rxchain.carrier.follower import CarrierFollower, FollowerSettings, make_follower
from rxchain.carrier.speech_aligner import SpeechAligner
from rxchain.carrier.track import Follow, Turned
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.envelope import EnvelopeDetector, emission_band
from rxchain.detectors.sidebands import both_sidebands, one_sideband, quarter_turned
from rxchain.detectors.switch import DetectorSwitch
from rxchain.detectors.weighted_sidebands import WeightedSidebands
from rxchain.emissions import Side
from rxchain.tuning.channel_bank import ChannelBank
from rxchain.tuning.plan import plan_bank

RATE_HZ = 12_000.0
N = 9_000  # three quarters of a second: several quanta of every stage
CHANNELS = 3
BAND = both_sidebands(300.0, 2_700.0, RATE_HZ)
STEP = 128  # samples of a squelch's step; of a switch's too, here
PLAN = plan_bank(48_000.0)
OFFSETS_HZ = np.array([-7_000.0, 1_234.5, 11_000.0])


@dataclass(frozen=True)
class Entry:
    """make: a new stage for so many channels. shape: of its input but for the samples. Outputs per input sample: ratio.

    alone: the stage for channel k alone, where that is not the same as the stage for any one channel.
    """

    make: Callable[[int], Any]
    shape: Callable[[int], tuple[int, ...]]
    dtype: type
    out_dtype: type
    ratio: float = 1.0
    alone: Callable[[int], Any] | None = None


def iq(channels: int) -> tuple[int, ...]:
    return (channels,)


def audio(channels: int) -> tuple[int, ...]:
    return (channels, 2)


def wideband(_channels: int) -> tuple[int, ...]:
    return ()


class OneGroup:
    """A channel bank with one group of channels, as a stage."""

    def __init__(self, offsets_hz: np.ndarray) -> None:
        self._bank = ChannelBank(PLAN, [(PLAN.base_bins, offsets_hz)])
        self.reset = self._bank.reset

    def process(self, iq: np.ndarray) -> np.ndarray:
        return self._bank.process(iq)[0]

    def flush(self) -> np.ndarray:
        return self._bank.flush()[0]


def decisions(rows: range, first: int, last: int) -> np.ndarray:
    """Open or shut, one detector or the other: by row and step alone, changing every few steps."""
    return (np.arange(first, last) + 3 * np.array(rows)[:, None]) // 4 % 2


class Steered:
    """A gate or a switch with its decisions, each of which is known when its step is complete."""

    def __init__(self, stage: Any, steer: Callable[[Any, np.ndarray, np.ndarray], np.ndarray], rows: range) -> None:
        self._stage, self._steer, self._rows = stage, steer, rows
        self._received = 0

    def reset(self) -> None:
        self._stage.reset()
        self._received = 0

    def process(self, block: np.ndarray) -> np.ndarray:
        before, self._received = self._received // STEP, self._received + block.shape[-1]
        return self._steer(self._stage, block, decisions(self._rows, before, self._received // STEP))

    def flush(self) -> np.ndarray:
        before, after = self._received // STEP, -(-self._received // STEP)
        self._received = after * STEP
        nothing = np.zeros((len(self._rows), 2, 0), np.float32)
        return self._steer(self._stage, nothing, decisions(self._rows, before, after))


def gate(rows: range) -> Steered:
    stage = Gate(len(rows), 2, STEP, RATE_HZ, np.zeros(len(rows), bool))
    return Steered(stage, lambda gate, block, steps: gate.process(block, steps.astype(bool)), rows)


def switch(rows: range) -> Steered:
    stage = DetectorSwitch(len(rows), 2, 2, STEP, RATE_HZ)
    return Steered(
        stage,
        lambda switch, block, steps: switch.process([block, block * np.float32(0.5)], steps.astype(np.int8)),
        rows,
    )


def follower(follow: Follow) -> Callable[[int], Any]:
    return lambda channels: make_follower(FollowerSettings(follow), channels, RATE_HZ)


LINES = [one for one in Follow if one is not Follow.SPEECH]


def aligner(channels: int) -> SpeechAligner:
    return SpeechAligner(channels, RATE_HZ, [1] * channels, [(300.0, 2_700.0)] * channels)


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
    "weighted sidebands": Entry(
        lambda c: WeightedSidebands(
            np.stack([2 * one_sideband(side, 300.0, 2_700.0, RATE_HZ) for side in (Side.UPPER, Side.LOWER)])[None],
            c, RATE_HZ,
        ),
        iq, np.complex64, np.float32,
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
    "notch": Entry(
        lambda c: ToneNotch([np.nan, 1_000.0, None][:c] + [np.nan] * max(0, c - 3), 2, RATE_HZ), audio, np.float32, np.float32,
        alone=lambda k: ToneNotch([[np.nan, 1_000.0, None][k]], 2, RATE_HZ),
    ),
    "automatic gain": Entry(
        lambda c: GainControl(GainSettings(), np.full(c, np.nan), 2, RATE_HZ), audio, np.float32, np.float32
    ),
    "fixed gain": Entry(
        lambda c: GainControl(GainSettings(), np.full(c, -6.0), 2, RATE_HZ), audio, np.float32, np.float32
    ),
    "limiter": Entry(lambda c: Limiter(c, 2, RATE_HZ, -30.0, 60), audio, np.float32, np.float32),
    "rate conversion": Entry(
        lambda c: RateConverter(c, 2, 12_345.67, 12_000.0), audio, np.float32, np.float32, ratio=12_000.0 / 12_345.67
    ),
    "squelch": Entry(
        lambda c: Squelch([((300.0, 2_700.0),)] * c, RATE_HZ, 4_900.0, np.full(c, np.nan)),
        iq, np.complex64, np.bool_, ratio=1.0 / STEP,
    ),
    "gate": Entry(
        lambda c: gate(range(c)), audio, np.float32, np.float32, alone=lambda k: gate(range(k, k + 1))
    ),
    "switch": Entry(
        lambda c: switch(range(c)), audio, np.float32, np.float32, alone=lambda k: switch(range(k, k + 1))
    ),
    "channel bank": Entry(
        lambda c: OneGroup(OFFSETS_HZ[:c]), wideband, np.complex64, np.complex64,
        ratio=PLAN.base_bins / PLAN.length, alone=lambda k: OneGroup(OFFSETS_HZ[k : k + 1]),
    ),
    **{f"follower, {one.value}": Entry(follower(one), iq, np.complex64, np.complex64) for one in LINES},
    "speech aligner": Entry(aligner, iq, np.complex64, np.complex64),
    "follower, fallback": Entry(fallback, iq, np.complex64, np.complex64),
}  # fmt: skip


def signal(entry: Entry, channels: int = CHANNELS, seed: int = 5) -> np.ndarray:
    """A carrier with a noisy message, a different one in each channel, so that every path of a stage has work."""
    rng = np.random.default_rng(seed)
    shape = (*entry.shape(channels), N)
    t = np.arange(N) / RATE_HZ
    if entry.dtype is np.float32:
        return (0.1 * rng.standard_normal(shape)).astype(np.float32)
    if len(shape) == 1:
        return (0.1 * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))).astype(np.complex64)
    carrier = np.exp(2j * np.pi * (3.0 + np.arange(channels)[:, None]) * t)
    noise = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    return ((1.0 + 0.5 * np.cos(2 * np.pi * 700.0 * t)) * carrier + 0.02 * noise).astype(np.complex64)


def plain(output: Any) -> np.ndarray:
    return output.iq if isinstance(output, Turned) else output


def run(stage: Any, pieces: list[np.ndarray]) -> np.ndarray:
    parts = [plain(stage.process(piece)) for piece in pieces]
    return np.concatenate([*parts, plain(stage.flush())], axis=-1)


# A transform over more rows may order its sums otherwise: single precision, some hundred terms.
ACROSS_CHANNELS = 2e-5


def named(*beginnings: str) -> list[str]:
    """Names of the stages that begin so."""
    return [name for name in STAGES if name.startswith(beginnings)]
