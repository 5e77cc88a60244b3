"""Like channels on their whole way: follow the carrier, detect, measure, choose, level, deliver."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from rxchain.audio.squelch import Squelch
from rxchain.carrier.fallback import FallbackFollower
from rxchain.carrier.follower import CarrierFollower, Follower, FollowerSettings, make_follower
from rxchain.carrier.nominal import NominalFollower
from rxchain.carrier.speech_aligner import SpeechAligner
from rxchain.carrier.track import Follow, Lock, Turned
from rxchain.chain.audio_path import AudioPath
from rxchain.chain.channel_settings import AUTO, OFF, ChannelSettings
from rxchain.chain.detector_set import DetectorSet
from rxchain.chain.group_tap import GroupTap, TappedGroup
from rxchain.chain.grouping import GroupKind, largest_shift_hz
from rxchain.detectors.stereo import sum_and_difference
from rxchain.emissions import Side
from rxchain.meters.figures import Figures
from rxchain.meters.group_meters import GroupMeters, MeteredChannel
from rxchain.streams import Bools, ComplexBlock, FloatBlock, Floats
from rxchain.tuning.plan import BankPlan

_PILOT_SHARE, _LEAST_SEARCH_HZ = 0.8, 60.0
_HISTORY_S = 660.0  # of a logged group's meters: the longest transmission, and some


class ChannelGroup:
    """A group of channels of one kind, from their I/Q to their audio.

    process(iq) : complex64, (channels, n), from the bank. Returns audio, float32, (channels, messages, m), at
        ``audio_rate_hz``; sample k is the instant k / rate after the group's first sample.
    first_index : of the group's first sample in its channels' stream: not 0 for a group that begins within a run.
    """

    def __init__(
        self,
        kind: GroupKind,
        channels: Sequence[ChannelSettings],
        plan: BankPlan,
        first_index: int = 0,
        audio_rate_hz: float | None = None,
    ) -> None:
        self.kind = kind
        self.channels = tuple(channels)
        self.rate_hz = plan.rate_hz(kind.bins)
        self.first_index = first_index
        # A channel turned away from its middle takes the bank's slopes with it.
        usable_hz = plan.usable_hz(kind.bins) - max(largest_shift_hz(channel) for channel in channels)
        self._follower = _follower(kind, channels, self.rate_hz)
        # An envelope needs no carrier: with short delay it doesn't wait for the follower, which serves the figures alone.
        self._direct = NominalFollower(len(channels), self.rate_hz) if kind.envelope_only and kind.live else None
        history_s = _HISTORY_S if kind.logged else 0.0
        self._meters = GroupMeters([_metered(channel) for channel in channels], self.rate_hz, usable_hz, history_s)
        thresholds_db = [channel.squelch_db for channel in channels]
        self._squelch = Squelch(
            [_occupied(channel) for channel in channels],
            self.rate_hz,
            usable_hz,
            np.array([np.nan if db in (AUTO, OFF) else float(db) for db in thresholds_db]),
        )
        self._detectors = DetectorSet(kind, channels, self.rate_hz, usable_hz)
        self._audio = AudioPath(
            channels, kind.n_messages, self._squelch.step_samples, self.rate_hz, kind.live, audio_rate_hz
        )
        self.audio_rate_hz = self._audio.rate_hz
        self._tap = GroupTap(self._audio.tap_rows(range(len(channels)))) if kind.logged else None
        n = len(channels)
        self._locked_hops = np.zeros(n, np.int64)
        self._first_lock_hop = np.full(n, -1, np.int64)
        self._hops = 0
        self._hop_samples = 1
        self._lock_now = np.full(n, Lock.NONE, np.int8)
        self._open_now = np.array([channel.squelch_db == OFF for channel in channels])
        self._always_open = self._open_now.copy()

    @property
    def delay_s(self) -> float:
        """How far the audio runs behind the channel's I/Q while streaming, apart from waits for full hops."""
        turning = self._follower if self._direct is None else self._direct
        samples = turning.delay_samples + self._detectors.delay_samples + self._audio.delay_samples
        return samples / self.rate_hz

    def process(self, iq: ComplexBlock) -> FloatBlock:
        """Audio as far as it is complete."""
        if self._tap is not None:
            self._tap.iq.append(iq)
        turned = self._follower.process(iq)
        self._measure(turned)
        heard = turned if self._direct is None else self._direct.process(iq)
        return self._audio.process(self._detected(heard), self._opened(heard.iq))

    def flush(self) -> FloatBlock:
        """The tail: as much audio in all as the channels' I/Q was long."""
        turned = self._follower.flush()
        self._measure(turned)
        heard = turned if self._direct is None else self._direct.flush()
        audio = [self._audio.process(self._detected(heard), self._opened(heard.iq))]
        audio.append(self._audio.process(self._detectors.flush(), self._tapped_steps(self._squelch.flush())))
        audio.append(self._audio.flush(np.zeros((len(self.channels), 0), bool)))
        return np.concatenate(audio, axis=2)

    def mark_lost(self, first_s: float, duration_s: float) -> None:
        """A stretch of the stream was lost: its samples are zeros and count in no figure."""
        first = int(np.floor(first_s * self.rate_hz)) - self.first_index
        self._meters.mark_lost(first, int(np.ceil(duration_s * self.rate_hz)) + 1)

    def take_tap(self) -> TappedGroup | None:
        """What a logbook needs, since the last time: I/Q, decisions, ungated audio; None where no channel is logged."""
        return None if self._tap is None else self._tap.take()

    @property
    def squelch_step_s(self) -> float:
        """Length of one decision of the squelch."""
        return self._squelch.step_samples / self.rate_hz

    def figures_between(self, first_s: float, last_s: float) -> list[Figures]:
        """Figures of a stretch of time, seconds of the group's own stream, within the last ten minutes."""
        return self._meters.between(first_s, last_s)

    def levels_db(self, first_s: float, last_s: float) -> Floats:
        """Level of each quarter second of a stretch of time, (channels, n)."""
        return self._meters.levels_db(first_s, last_s)

    def recent_figures(self) -> list[Figures]:
        """Figures of each channel over the last seconds."""
        return self._meters.recent()

    def overall_figures(self) -> list[Figures]:
        """Figures of each channel since the start."""
        return self._meters.overall()

    @property
    def gain_db(self) -> list[float | None]:
        """Gain of each channel's automatic gain control, None where it is off."""
        return [
            float(db) if auto else None for db, auto in zip(self._audio.gain_db, self._audio.is_automatic, strict=True)
        ]

    @property
    def audio_dbfs(self) -> Floats:
        """Level of the delivered audio over the last moments, (channels, messages)."""
        return self._audio.level_dbfs

    @property
    def is_open(self) -> Bools:
        """Whether each channel's squelch is open."""
        return self._open_now

    def lock_words(self) -> list[str]:
        """Each channel's lock at the latest hop."""
        if self.kind.follow is Follow.NOMINAL:
            return ["nominal"] * len(self.channels)
        return [Lock(int(state)).name.lower() for state in self._lock_now]

    def locked_fraction(self, row: int) -> float | None:
        """Share of the time so far in which a channel's carrier was followed; None where there is nothing to follow."""
        if self.kind.follow is Follow.NOMINAL:
            return None
        return float(self._locked_hops[row] / self._hops) if self._hops else 0.0

    def first_lock_s(self, row: int) -> float | None:
        """When a channel's carrier was first followed, seconds from the start; None if never."""
        if self._first_lock_hop[row] < 0:
            return None
        return float((self.first_index + self._first_lock_hop[row] * self._hop_samples) / self.rate_hz)

    def detector(self, row: int) -> tuple[str, str]:
        """The detector that serves a channel, and why."""
        locked = self.locked_fraction(row)
        was_locked = locked is not None and locked > 0.0
        if was_locked and isinstance(self._follower, FallbackFollower):
            by_messages = self._follower.uses_second
            if by_messages is not None and by_messages[row]:
                return "coherent", "no pilot: followed by the messages; which is which, and their signs, are not known"
        return self._detectors.in_words(row, was_locked)

    def detector_at(self, row: int, seconds: float) -> tuple[str, str]:
        """The same at a time, seconds of the group's own stream."""
        if isinstance(self._follower, FallbackFollower):
            return self.detector(row)
        locked = self.locked_fraction(row)
        return self._detectors.in_words_at(row, seconds, locked is not None and locked > 0.0)

    def _measure(self, turned: Turned) -> None:
        lock = turned.track.lock
        if lock.shape[1]:
            locked = lock == Lock.LOCKED
            first = np.argmax(locked, axis=1)
            new = (self._first_lock_hop < 0) & locked.any(axis=1)
            self._first_lock_hop[new] = self._hops + first[new]
            self._locked_hops += locked.sum(axis=1)
            self._hops += lock.shape[1]
            self._hop_samples = turned.hop_samples
            self._lock_now = lock[:, -1]
        self._meters.process(turned)

    def _detected(self, turned: Turned) -> FloatBlock:
        upright = sum_and_difference(turned.iq) if self.kind.stereo else turned.iq
        return self._detectors.process(turned, upright)

    def _opened(self, iq: ComplexBlock) -> Bools:
        steps = self._squelch.process(iq)
        if steps.shape[1]:
            self._open_now = steps[:, -1] | self._always_open
        return self._tapped_steps(steps)

    def _tapped_steps(self, steps: Bools) -> Bools:
        if self._tap is not None:
            self._tap.steps.append(steps)
        return steps


def _follower(kind: GroupKind, channels: Sequence[ChannelSettings], rate_hz: float) -> Follower:
    n, sides = len(channels), [channel.emission.side or 0 for channel in channels]
    if kind.follow is Follow.SPEECH:
        return SpeechAligner(n, rate_hz, sides, [channel.audio_hz for channel in channels])
    # Where a pilot may be missing, it is not looked for among the messages.
    search_hz = _PILOT_SHARE * kind.message_hz[0] if kind.pilot_is_optional else FollowerSettings(kind.follow).search_hz
    search_hz = kind.tolerance_hz or max(search_hz, _LEAST_SEARCH_HZ)
    settings = FollowerSettings(kind.follow, search_hz, kind.live, kind.message_hz)
    if kind.follow is Follow.NOMINAL:
        return make_follower(settings, n, rate_hz, sides, np.array([_shift_hz(channel) for channel in channels]))
    if kind.fourth_power:
        return FallbackFollower(
            CarrierFollower(settings, n, rate_hz, sides),
            CarrierFollower(replace(settings, follow=Follow.FOURTH_POWER), n, rate_hz, sides),
        )
    return make_follower(settings, n, rate_hz, sides)


def _shift_hz(channel: ChannelSettings) -> float:
    """Where the channel's nominal carrier is put: a beat note stays above 0 Hz."""
    return channel.align_hz if channel.emission.family != "A1A" else -channel.beat_hz


def _metered(channel: ChannelSettings) -> MeteredChannel:
    sideband = "both" if channel.sideband in ("better", "weighted") else channel.sideband
    return MeteredChannel(channel.emission, channel.audio_hz, channel.vestige_hz, sideband, channel.aligns_by_speech)


def _occupied(channel: ChannelSettings) -> tuple[tuple[float, float], ...]:
    """The bands about the upright carrier in which the emission lies."""
    low_hz, high_hz = channel.audio_hz
    emission = channel.emission
    if emission.family == "A1A":
        return ((low_hz, high_hz),)
    if emission.side is not None:
        start_hz = low_hz if emission.family == "J3E" else -50.0
        start_hz = -channel.vestige_hz if emission.is_vestigial else start_hz
        return ((start_hz, high_hz),) if emission.side is Side.UPPER else ((-high_hz, -start_hz),)
    return ((-high_hz, high_hz),)
