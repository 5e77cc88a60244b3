"""Follow the carriers of a group of channels, and turn each channel upright.

::

    samples -> [message band, power] -> block sums at each channel's frequency, every 5.3 ms
            -> acquisition         spectra along straight drifts, for channels that follow nothing
            -> frequency filter    phase, frequency, drift; carries on through fades and pauses
            -> window contest      fixed-lag smoothing of the block sums, turned by the integral of that frequency
            -> phase hold, lock watch, motion watch
            -> derotation

Feed-forward throughout: the phase taken out is read from samples before and after the one it is taken from, 128 ms to
each side where the noise asks for it. Nothing is fed back to the input, so there is no pull-in, and no cycle slips.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import numpy as np

from rxchain.carrier.acquisition import Acquisition, Found
from rxchain.carrier.block_sums import BlockSums
from rxchain.carrier.burst_guard import BurstGuard, without_nonsense
from rxchain.carrier.derotation import derotate
from rxchain.carrier.fading import MotionWatch
from rxchain.carrier.frequency_filter import FrequencyFilter
from rxchain.carrier.history import History
from rxchain.carrier.hops import (
    EVERY_HOPS,
    HOPS_A_QUANTUM,
    LIVE_LOOK_AHEAD_HOPS,
    LOOK_AHEAD_HOPS,
    SPECTRUM_HOPS,
    hop_samples,
)
from rxchain.carrier.joining import beginning, join
from rxchain.carrier.line_choice import LineChoice
from rxchain.carrier.line_fit import residual_hz
from rxchain.carrier.line_spectra import LineSpectra
from rxchain.carrier.lock_watch import LockWatch
from rxchain.carrier.message_band import MessageBand
from rxchain.carrier.nominal import NominalFollower
from rxchain.carrier.phase_hold import PhaseHold
from rxchain.carrier.phasor import unit_phasor
from rxchain.carrier.power_law import line_amplitude, line_signal, signal_noise_density
from rxchain.carrier.quadrature_noise import QuadratureNoise
from rxchain.carrier.settings import RECIPES, FollowerSettings
from rxchain.carrier.takeover import Takeover
from rxchain.carrier.track import Follow, Lock, Track, Turned
from rxchain.carrier.window_contest import Smoothed, WindowContest
from rxchain.errors import SettingError
from rxchain.streams import ComplexBlock, Floats

__all__ = ["CarrierFollower", "Follower", "FollowerSettings", "NominalFollower", "make_follower"]

_LINE_HOPS = 48  # kept of the line's signal: a spectrum, and what the look-ahead is made again from
_PHASE_HOPS = 12  # a new line's phase is the mean of so many block sums
_ANY_PHASE = 1.0 / 12.0  # cycles^2: variance of a phase of which nothing is known
_REFINED_HZ = 6.0  # a bin of the spectra a line is found in
_STEEPEST = 2.0  # drifts grow no steeper than so many times those searched for
_LEVEL_GAIN = 0.02  # a quantum: memory of the line's level, 1 s


class Follower(Protocol):
    """What all followers do; the stream conventions of :mod:`rxchain.streams` hold."""

    hop_samples: int
    delay_samples: int

    def process(self, iq: ComplexBlock) -> Turned:
        """Hops that have become complete."""
        ...

    def flush(self) -> Turned:
        """The rest; the last hop may be short. The follower is as new afterwards."""
        ...

    def reset(self) -> None:
        """As new, with the same settings."""
        ...


def make_follower(
    settings: FollowerSettings,
    n_channels: int,
    rate_hz: float,
    sides: Sequence[int] | None = None,
    shift_hz: Floats | None = None,
) -> Follower:
    """The follower for the settings; ``shift_hz`` is for followers of the nominal frequency only."""
    if settings.follow is Follow.NOMINAL:
        return NominalFollower(n_channels, rate_hz, shift_hz)
    if shift_hz is not None:
        raise SettingError("shift_hz", shift_hz, "a shift needs follow=nominal", "leave it out")
    return CarrierFollower(settings, n_channels, rate_hz, sides)


class CarrierFollower:
    """Follows one line a channel.

    settings : what to follow; a line, not :attr:`Follow.NOMINAL` or :attr:`Follow.SPEECH`.
    rate_hz : sample rate of the channels.
    sides : for pilots, where each channel's message lies: +1 above the carrier, -1 below, 0 both; default all 0.

    hop_samples : samples a hop. delay_samples : how far the output may run behind the input, at most.
    bandwidth_hz : float64, (n_channels,): one-sided noise bandwidth of the line's phase at the moment; the variance of
        that phase is ``bandwidth_hz / (C/N0)`` rad^2.

    A channel counts as followed from the first hop at which its line is confirmed; until then, and after it is lost,
    its samples pass with a constant phase. At a carrier's appearance the hops still in the look-ahead are turned right
    from the first locked one.
    """

    def __init__(
        self, settings: FollowerSettings, n_channels: int, rate_hz: float, sides: Sequence[int] | None = None
    ) -> None:
        if settings.follow not in RECIPES:
            raise SettingError("follow", settings.follow.value, "there is no line to follow", "use its own follower")
        sides = tuple(sides) if sides is not None else (0,) * n_channels
        if len(sides) != n_channels:
            raise SettingError("sides", sides, f"one side for each of {n_channels} channels")
        self.settings = settings
        self._n_channels, self._rate_hz, self._sides = n_channels, rate_hz, sides
        self._recipe = RECIPES[settings.follow]
        self.hop_samples = hop_samples(rate_hz)
        self._hop_s = self.hop_samples / rate_hz
        self._quantum = HOPS_A_QUANTUM * self.hop_samples
        self._look_hops = LIVE_LOOK_AHEAD_HOPS if settings.live else LOOK_AHEAD_HOPS
        # What the message band and half a block sum take of the look-ahead is lost to the smoother.
        self._band_hops = 0 if self._recipe.power == 1 else 1
        self._lag = self._look_hops - self._band_hops - self._recipe.span_hops // 2
        self.delay_samples = self._look_hops * self.hop_samples + self._quantum - 1
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        recipe, n, hop_s, quantum = self._recipe, self._n_channels, self._hop_s, HOPS_A_QUANTUM
        self._waiting: ComplexBlock = np.zeros((n, 0), np.complex64)
        self._quanta = 0
        self._taken_in = self._delivered = 0
        self._sums = BlockSums(n, self._rate_hz, self.hop_samples, recipe.span_hops)
        choice = LineChoice(self.settings.follow, self.settings.message_hz, self._sides)
        self._spectra = LineSpectra(self._rate_hz, self.hop_samples, recipe.power * self.settings.search_hz)
        self._acquisition = Acquisition(n, self._spectra, recipe, choice)
        self._takeover = Takeover(n, self._spectra, choice)
        self._filter = FrequencyFilter(n, quantum, hop_s, _STEEPEST * recipe.power * recipe.drift_hz_s)
        self._contest = WindowContest(n, recipe.half_lengths, self._lag, quantum, hop_s, self._sums.overlap_correlation)
        self._noise = QuadratureNoise(n, recipe.span_hops, quantum, hop_s, recipe.hold_s)
        self._hold = PhaseHold(n, recipe.hold_weight)
        self._guard = BurstGuard(n, quantum, hop_s, recipe.burst_ratio)
        self._watch = LockWatch(n, self._lag, quantum, hop_s, recipe.confirm_s)
        self._motion = MotionWatch(n, self._lag, quantum, hop_s, recipe.fast_fading)
        self._band = MessageBand(
            n, self._rate_hz, self.hop_samples, quantum, self.settings.message_hz[1], self.settings.search_hz
        )
        line_hops = _LINE_HOPS if recipe.power > 1 else max(_LINE_HOPS, self._look_hops + quantum)
        self._samples = History((n,), max(line_hops, self._look_hops + quantum) * self.hop_samples, np.complex64)
        self._line = self._samples if recipe.power == 1 else History((n,), line_hops * self.hop_samples, np.complex64)
        self._blocks = History((2, n), self._contest.length, np.float32)
        self._reference = History((n,), self._lag + quantum + 1, np.float64)
        self._used_hz = History((n,), self._lag + quantum, np.float64)
        self._last_edge: Floats = np.zeros(n)
        self._level: Floats = np.zeros(n)
        self.bandwidth_hz: Floats = np.zeros(n)

    def process(self, iq: ComplexBlock) -> Turned:
        """Take in samples ``(n_channels, n)``, complex64; whole hops come out as they become known."""
        if iq.ndim != 2 or iq.shape[0] != self._n_channels:
            raise SettingError("iq", iq.shape, f"samples have the shape ({self._n_channels}, n)")
        self._taken_in += iq.shape[1]
        samples = np.concatenate([self._waiting, iq], axis=1) if self._waiting.shape[1] else iq
        whole = samples.shape[1] // self._quantum * self._quantum
        pieces = [self._advance(samples[:, k : k + self._quantum]) for k in range(0, whole, self._quantum)]
        self._waiting = samples[:, whole:].astype(np.complex64)
        turned = join([piece for piece in pieces if piece is not None], self._n_channels, self.hop_samples)
        self._delivered += turned.iq.shape[1]
        return turned

    def flush(self) -> Turned:
        """What is still on the way; as much has then come out as went in, and the follower is as new."""
        missing = self._taken_in - self._delivered
        silence = -(-missing // self._quantum) * self._quantum + self._look_hops * self.hop_samples
        short = self._waiting.shape[1]
        silence += -(short + silence) % self._quantum
        turned = self.process(np.zeros((self._n_channels, silence), np.complex64))
        self.reset()
        return beginning(turned, missing)

    def _advance(self, block: ComplexBlock) -> Turned | None:
        recipe, hop = self._recipe, self.hop_samples
        self._quanta += 1
        self._samples.push(without_nonsense(np.ascontiguousarray(block)))
        if recipe.power > 1:
            known = self._watch.active & self._watch.confirmed
            self._band.retune(self._filter.frequency_hz / recipe.power, known)
            banded = self._band.filter(self._samples.latest(self._band.length))
            self._line.push(line_signal(banded, recipe.power))
        hops = self._quanta * HOPS_A_QUANTUM
        if hops >= SPECTRUM_HOPS and hops % EVERY_HOPS == 0:
            self._search()
        self._sums.retune(self._filter.frequency_hz)
        sums = self._sums.sums(self._line.latest(self._quantum + (recipe.span_hops - 1) * hop))
        self._push_blocks(self._guard.guard(sums, self._level))
        smoothed = self._contest.smooth(
            self._blocks.latest(self._contest.length), self._noise.power, self._watch.followed_s
        )
        return self._turn(smoothed)

    def _search(self) -> None:
        newest, followed = self._line.latest(self._spectra.length), self._watch.active & self._watch.confirmed
        lines = self._acquisition.search(newest, ~followed, ~self._watch.active)
        if self._recipe.power == 1:
            lines += self._takeover.look(newest, followed, self._watch.locked, self._level, self._filter.frequency_hz)
        for found in lines:
            self._take_up(found)

    def _push_blocks(self, sums: ComplexBlock) -> None:
        used_hz = self._filter.follow(
            sums, self._noise.held, self._watch.active, self._motion.fast, self._motion.lag_hz
        )
        # The blocks are turned by the integral of the frequency: the filter's phase takes kicks, which would stay.
        reference = self._reference.latest(1) + np.cumsum(used_hz, axis=1) * self._hop_s
        self._used_hz.push(used_hz)
        self._reference.push(reference)
        turned = sums * unit_phasor(-reference)
        self._blocks.push(np.stack([turned.real, turned.imag]))

    def _take_up(self, found: Found) -> None:
        """Follow a new line, and make the look-ahead again at its frequency, so that it is turned right."""
        channel, hop_s = found.channel, self._hop_s
        hops_ago = HOPS_A_QUANTUM + self._recipe.span_hops // 2
        line_hz = found.line_hz - found.drift_hz_s * hops_ago * hop_s
        self._sums.tune(channel, line_hz)
        samples = self._line.latest(_LINE_HOPS * self.hop_samples - self._quantum, ago=self._quantum)
        sums = self._sums.sums_of(channel, samples[channel])
        back_s = np.arange(self._contest.length - 1, -1, -1) * hop_s
        swept = line_hz * back_s - 0.5 * found.drift_hz_s * back_s**2
        if self._recipe.power == 1:
            line_hz += residual_hz(sums * unit_phasor(swept[-len(sums) :]), hop_s, _REFINED_HZ)
        newest = float(self._reference.latest(1)[channel, 0])
        reference = newest - line_hz * back_s + 0.5 * found.drift_hz_s * back_s**2
        turned = sums * unit_phasor(-reference[-len(sums) :])
        blocks = self._blocks.latest(self._contest.length)[:, channel]
        blocks[...] = 0.0
        blocks[0, -len(sums) :], blocks[1, -len(sums) :] = turned.real, turned.imag
        edges = self._reference.latest(self._lag + HOPS_A_QUANTUM + 1)[channel]
        edges[...] = reference[-len(edges) :]
        used_hz = self._used_hz.latest(self._lag + HOPS_A_QUANTUM)[channel]
        used_hz[...] = line_hz - found.drift_hz_s * (back_s[-len(used_hz) :] + 0.5 * hop_s)
        mean = np.mean(turned[-_PHASE_HOPS:])
        phase = newest + float(np.angle(mean)) / (2.0 * np.pi)
        noise = found.noise_density * self._sums.noise_bandwidth_hz
        # In a pause of the message there may be no phase to begin with.
        phase_variance = min(_ANY_PHASE, noise / _PHASE_HOPS / (8.0 * np.pi**2 * float(np.abs(mean)) ** 2 + 1e-300))
        self._filter.start(
            channel, phase, line_hz, found.drift_hz_s, phase_variance, found.covariance, float(np.abs(mean))
        )
        self._noise.start(channel, noise)
        for part in (self._contest, self._hold, self._watch, self._motion, self._takeover):
            part.start(channel)
        self._level[channel] = float(np.abs(mean))
        self._guard.start(channel, self._level[channel])

    def _turn(self, smoothed: Smoothed) -> Turned | None:
        hops, power = HOPS_A_QUANTUM, self._recipe.power
        self._noise.measure(smoothed.quadrature, smoothed.noise_gain, smoothed.present, self._watch.followed_s)
        before, cycles = self._hold.hold(smoothed.line, np.sqrt(smoothed.noise_share * self._noise.held))
        power_now = smoothed.recent.real**2 + smoothed.recent.imag**2
        noise_now = smoothed.recent_share * self._noise.power
        self.bandwidth_hz = 0.5 * smoothed.noise_share * self._sums.noise_bandwidth_hz
        smoothed_power = np.mean(smoothed.line.real**2 + smoothed.line.imag**2, axis=1)
        given_up = self._watch.judge(
            smoothed_power / (smoothed.noise_share * self._noise.power), power_now.mean(axis=1) / noise_now
        )
        narrow_noise = self._contest.narrow_share * self._noise.power
        shift = self._motion.watch(smoothed.narrow, narrow_noise, self._watch.active)
        if shift.any():
            self._filter.shift(shift, self._motion.lag_hz)
        if given_up.any():
            self._filter.stop(given_up)
            self._acquisition.forget(given_up)
        lock = self._watch.lock
        shown = (lock != Lock.NONE)[:, None]
        reference = self._reference.latest(hops + 1, ago=self._lag)
        edges = (reference + np.concatenate([before[:, None], cycles], axis=1)) / power
        edges = np.where(shown, edges, self._last_edge[:, None])
        self._last_edge = edges[:, -1].copy()
        line = np.sqrt(np.maximum(power_now - noise_now[:, None], 0.0))
        self._level += np.where(self._watch.locked, _LEVEL_GAIN, 0.0) * (line.mean(axis=1) - self._level)
        if self._quanta * hops <= self._look_hops:
            return None
        density = signal_noise_density(
            self._noise.power / self._sums.noise_bandwidth_hz,
            np.where(shown[:, 0], self._level, 0.0),
            power,
            self._band.bandwidth_hz,
        )
        track = Track(
            offset_hz=np.where(shown, self._used_hz.latest(hops, ago=self._lag) / power, 0.0),
            phase_cycles=0.5 * (edges[:, 1:] + edges[:, :-1]),
            amplitude=np.where(shown, line_amplitude(line, power), 0.0),
            noise_density=np.repeat(density[:, None], hops, axis=1),
            lock=np.repeat(lock[:, None], hops, axis=1),
        )
        oldest = self._samples.latest(self._quantum, ago=self._look_hops * self.hop_samples)
        return Turned(derotate(oldest, edges), track, self.hop_samples)
