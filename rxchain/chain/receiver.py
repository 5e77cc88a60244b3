"""The receiver: one bank, all groups of channels, one stream in, audio and figures of every channel out."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rxchain.carrier.track import Follow
from rxchain.chain.auto_channels import AutoChannels
from rxchain.chain.channel_group import ChannelGroup
from rxchain.chain.channel_settings import AUTO, OFF, ChannelSettings, as_emission
from rxchain.chain.grouping import grouped, kind_of
from rxchain.chain.handover import FADE_S, Handover
from rxchain.chain.status import ChannelStatus
from rxchain.chain.trends import Trends
from rxchain.emissions import Emission
from rxchain.errors import SettingError
from rxchain.identify.naming import CANT_TELL
from rxchain.meters.figures import Figures
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block, Bools, ComplexBlock, FloatBlock, Floats
from rxchain.tuning.channel_bank import HOPS_A_BATCH, LIVE_HOPS_A_BATCH, ChannelBank
from rxchain.tuning.impulse_blanker import AUTO_DB, ImpulseBlanker
from rxchain.tuning.plan import plan_bank
from rxchain.units import format_frequency

_SILENCE_PIECE = 1 << 18
_SPECTRUM_PARTS = 480
_MOST_EVENTS = 100_000
# How long a new group is left to find its carrier and its gain before it is heard.
_SETTLES_S, _SETTLES_BY_HAND_S = 1.0, 0.35
_SETTLED_S = {Follow.SQUARE: 2.6, Follow.PILOT: 1.4}


@dataclass(frozen=True, slots=True)
class ChannelAudio:
    """New audio of one channel: float32, (messages, n), following on what came before."""

    place: int
    audio: FloatBlock


@dataclass(frozen=True, slots=True)
class ChannelTap:
    """What a logbook needs of one channel, following on what came before; see ``TappedGroup``."""

    place: int
    group: ChannelGroup
    row: int
    iq: ComplexBlock
    steps: Bools
    audio: FloatBlock | None


class _Run:
    """A group at work: which places of the run its rows are."""

    def __init__(self, group: ChannelGroup, places: list[int]) -> None:
        self.group, self.places = group, places
        self.in_use = set(places)


class Receiver:
    """Receives every channel of a stream.

    process(block) : the next block of the stream; returns the audio that has become complete, by channel.
    Lost samples are bridged by silence of the same length, so that audio stays on the clock; figures leave them out.
    A channel whose emission is not given is identified on the way, and received as what it is found to be.
    """

    def __init__(self, info: SourceInfo, channels: tuple[ChannelSettings, ...]) -> None:
        self.info = info
        self.channels = list(channels)
        self._plan = plan_bank(info.sample_rate_hz)
        for channel in channels:
            _check_inside(channel, info)
        is_live = any(channel.delay == "live" for channel in channels)
        self._bank = ChannelBank(self._plan, [], LIVE_HOPS_A_BATCH if is_live else HOPS_A_BATCH)
        self._runs: list[_Run] = []
        self._at: dict[int, tuple[ChannelGroup, int]] = {}
        self._next: dict[int, ChannelSettings] = {}
        self._handovers: dict[int, tuple[Handover, _Run, _Run]] = {}
        self._audio_rates: dict[int, float] = {}
        self._audio_samples = [0] * len(channels)
        for run in self._start(dict(enumerate(channels))):
            for row, place in enumerate(run.places):
                self._at[place] = run.group, row
                self._audio_rates[place] = run.group.audio_rate_hz
        self._auto = self._identifies(channels)
        self._blanker = _blanker(channels, info.sample_rate_hz)
        self.samples = self.samples_lost = self.gaps = self.overloaded = 0
        self.losses: deque[tuple[float, float]] = deque(maxlen=_MOST_EVENTS)  # seconds: when, how much
        self.overloads: deque[tuple[float, int]] = deque(maxlen=_MOST_EVENTS)  # when, how many samples
        self._in_gap = False  # a gap may be told in parts
        self._gap_from_s = 0.0
        self._trends = Trends(len(channels))
        self._recent: dict[int, Figures] = {}
        self._overall: dict[int, Figures] = {}

    @property
    def elapsed_s(self) -> float:
        """Stream time since the first sample, gaps included."""
        return (self.samples + self.samples_lost) / self.info.sample_rate_hz

    @property
    def overload_fraction(self) -> float:
        """Share of the received samples that touched the converter's rails."""
        return self.overloaded / self.samples if self.samples else 0.0

    def audio_rate_hz(self, place: int) -> float:
        """Sample rate of a channel's audio; it stays whatever the channel turns out to be."""
        return self._audio_rates[place]

    def process(self, block: Block) -> list[ChannelAudio]:
        """The audio that this block completes."""
        audio: list[ChannelAudio] = []
        if block.samples_lost:
            if not self._in_gap:
                self.gaps += 1
                self._gap_from_s = self.elapsed_s
            rate_hz = self.info.sample_rate_hz
            for run in self._runs:
                run.group.mark_lost(self.elapsed_s, block.samples_lost / rate_hz)
            left = block.samples_lost
            while left:
                n = min(left, _SILENCE_PIECE)
                audio += self._through(np.zeros(n, np.complex64))
                left -= n
            self.samples_lost += block.samples_lost
        if block.overloaded:
            self.overloads.append((self.elapsed_s, block.overloaded))
        self._in_gap = self._in_gap or block.samples_lost > 0
        if self._in_gap and len(block.iq):
            self._end_gap()
        if block.centre_hz is not None:
            self._bank.retune(block.centre_hz - self.info.centre_hz)
            self.info = replace(self.info, centre_hz=block.centre_hz)
        self.overloaded += block.overloaded
        self.samples += len(block.iq)
        return audio + self._through(block.iq)

    def _end_gap(self) -> None:
        self._in_gap = False
        self.losses.append((self._gap_from_s, self.elapsed_s - self._gap_from_s))

    def flush(self) -> list[ChannelAudio]:
        """The last of every channel's audio; each is as long as the stream."""
        if self._in_gap:
            self._end_gap()
        audio = [] if self._blanker is None else self._tuned(self._blanker.flush())
        audio += self._delivered(self._bank.flush())
        for run in list(self._runs):
            audio += self._from_run(run, run.group.flush())
        for place, (handover, _, _) in self._handovers.items():
            audio += [ChannelAudio(place, piece) for piece in handover.finish()]
        self._handovers.clear()
        return audio

    def take_taps(self) -> list[ChannelTap]:
        """What the logged channels' groups made since the last time."""
        taps = []
        for run in self._runs:
            tapped = run.group.take_tap()
            if tapped is None:
                continue
            for row, place in enumerate(run.places):
                if self._at[place] == (run.group, row):
                    audio = None if tapped.audio is None else tapped.audio[row]
                    taps.append(ChannelTap(place, run.group, row, tapped.iq[row], tapped.steps[row], audio))
        return taps

    def change(self, place: int, channel: ChannelSettings) -> None:
        """Receives a channel in another way from the next batch on; its audio goes over without a click.

        Raises :class:`SettingError` where the channel cannot be received so; nothing changes then. While it is on its way
        from an earlier change, the latest waits until it has arrived.
        """
        _check_inside(channel, self.info)
        kind_of(channel, self._plan)
        if place in self._handovers:
            self._next[place] = channel
        else:
            self._change_all({place: channel}, _SETTLES_BY_HAND_S)

    def wanted(self, place: int) -> ChannelSettings:
        """How a channel is to be received once all changes have been carried out."""
        return self._next.get(place, self.channels[place])

    def figures(self, place: int) -> Figures:
        """A channel's figures since the start, as of the last :meth:`measure` with ``overall``."""
        return self._overall.get(place, Figures())

    def measure(self, overall: bool) -> None:
        """Brings the figures up to date: the recent ones, and those since the start where asked for."""
        for run in self._runs:
            current = [row for row, place in enumerate(run.places) if self._at[place] == (run.group, row)]
            lately = run.group.recent_figures()
            self._recent.update((run.places[row], lately[row]) for row in current)
            if overall:
                figures = run.group.overall_figures()
                self._overall.update((run.places[row], figures[row]) for row in current)
        self._trends.note(self.elapsed_s, [self._recent[place] for place in range(len(self.channels))])

    def spectrum_dbfs(self) -> Floats:
        """Power across the capture at this moment, in equal parts, lowest frequency first; (parts,)."""
        return np.asarray(10.0 * np.log10(self._bank.mean_spectrum(_SPECTRUM_PARTS) + 1e-20))

    def group_of(self, place: int) -> tuple[ChannelGroup, int]:
        """The group a channel works in, and its row there."""
        return self._at[place]

    def channel_status(self, place: int) -> ChannelStatus:
        """A snapshot of one channel."""
        channel = self.channels[place]
        group, row = self._at[place]
        detector, reason = group.detector(row)
        emission, given, confidence = self.identified(place)
        received = group.channels[row]  # which may still be on its way to another group
        return ChannelStatus(
            name=channel.name,
            frequency_hz=channel.frequency_hz,
            emission=emission,
            emission_given=given,
            emission_confidence=confidence,
            detector=detector,
            detector_reason=reason,
            lock=group.lock_words()[row],
            open=bool(group.is_open[row]),
            messages=messages_of(received),
            audio_hz=received.audio_hz,
            audio_dbfs=tuple(float(level) for level in group.audio_dbfs[row]),
            gain_db=group.gain_db[row],
            recent=self._recent.get(place, Figures()),
            overall=self._overall.get(place, Figures()),
            offset_trend_hz=self._trends.offset_hz(place),
            snr_trend_db=self._trends.snr_db(place),
        )

    def identified(self, place: int) -> tuple[str, bool, float]:
        """Name of a channel's emission, whether it was given, and how sure it is; or what is there in place of one."""
        channel = self.channels[place]
        if channel.emission_given:
            return channel.emission.name, True, 1.0
        guess = self._auto.guesses.get(place) if self._auto else None
        if guess is None:
            return CANT_TELL, False, 0.0
        return guess.name, False, guess.confidence

    def _identifies(self, channels: tuple[ChannelSettings, ...]) -> AutoChannels | None:
        places = [place for place, channel in enumerate(channels) if not channel.emission_given]
        if not places:
            return None
        auto = AutoChannels(places, [channels[place] for place in places], self._plan)
        self._bank.add(auto.bins, self._offsets_hz([channels[place] for place in places]))
        return auto

    def _offsets_hz(self, channels: Sequence[ChannelSettings]) -> Floats:
        return np.array([channel.frequency_hz - self.info.centre_hz for channel in channels])

    def _start(self, wanted: dict[int, ChannelSettings]) -> list[_Run]:
        """Groups for these places, at work from the next batch on."""
        started = []
        channels = tuple(wanted.values())
        places = list(wanted)
        # All audio of a group has one rate; what a channel began with it keeps.
        for rate_hz in dict.fromkeys(self._audio_rates.get(place) for place in places):
            some = [k for k, place in enumerate(places) if self._audio_rates.get(place) == rate_hz]
            members = grouped(tuple(channels[k] for k in some), self._plan)
            for kind, group_members in members.items():
                group_channels = [channel for _, channel in group_members]
                first = self._bank.add(kind.bins, self._offsets_hz(group_channels), before=len(self._runs))
                group = ChannelGroup(kind, group_channels, self._plan, first, rate_hz)
                run = _Run(group, [places[some[k]] for k, _ in group_members])
                self._runs.append(run)
                started.append(run)
        return started

    def _change_all(self, wanted: dict[int, ChannelSettings], settles_s: float | None = None) -> None:
        """Each channel's audio is taken from its new group once that has settled; a change on the way ends at once."""
        wanted = {place: channel for place, channel in wanted.items() if place not in self._handovers}
        old_runs = {place: self._run_of(place) for place in wanted}
        for run in self._start(wanted):
            group, rate_hz = run.group, run.group.audio_rate_hz
            first = round(group.first_index * rate_hz / group.rate_hz)
            wait_s = settles_s or _SETTLED_S.get(group.kind.follow, _SETTLES_S)
            settled = first + round(wait_s * rate_hz)
            for place in run.places:
                handover = Handover(self._audio_samples[place], first, settled, round(FADE_S * rate_hz))
                self._handovers[place] = handover, old_runs[place], run
        for place, channel in wanted.items():
            self.channels[place] = channel

    def _run_of(self, place: int) -> _Run:
        group = self._at[place][0]
        return next(run for run in self._runs if run.group is group)

    @property
    def blanked_fraction(self) -> float:
        """Share of the samples that the impulse blanker cut out."""
        return self._blanker.blanked / self.samples if self._blanker is not None and self.samples else 0.0

    def _through(self, iq: ComplexBlock) -> list[ChannelAudio]:
        return self._tuned(iq if self._blanker is None else self._blanker.process(iq))

    def _tuned(self, iq: ComplexBlock) -> list[ChannelAudio]:
        if self._auto is None:
            return self._delivered(self._bank.process(iq))
        # What is identified takes effect at the next batch, whatever the blocks are.
        audio: list[ChannelAudio] = []
        while len(iq):
            n = min(len(iq), self._bank.until_batch)
            audio += self._delivered(self._bank.process(iq[:n]))
            iq = iq[n:]
        return audio

    def _delivered(self, blocks: list[ComplexBlock]) -> list[ChannelAudio]:
        audio: list[ChannelAudio] = []
        for run, iq in zip(list(self._runs), blocks, strict=False):
            if iq.shape[1]:
                audio += self._from_run(run, run.group.process(iq))
        if self._auto is not None and len(blocks) and blocks[-1].shape[1]:
            self._take_up(self._auto.process(blocks[-1]))
        self._drop_idle()
        self._change_waiting()
        return audio

    def _change_waiting(self) -> None:
        for place in [place for place in self._next if place not in self._handovers]:
            self._change_all({place: self._next.pop(place)}, _SETTLES_BY_HAND_S)

    def _take_up(self, known: list[tuple[int, Emission]]) -> None:
        changed = {
            place: as_emission(self.channels[place], emission)
            for place, emission in known
            if emission is not self.channels[place].emission and not self.channels[place].emission_given
        }
        if changed:
            self._change_all(changed)

    def _from_run(self, run: _Run, audio: FloatBlock) -> list[ChannelAudio]:
        """What of a group's new audio, (channels, messages, n), can be delivered."""
        made = []
        for row, place in enumerate(run.places):
            if place in self._handovers:
                handover, old, new = self._handovers[place]
                pieces = (
                    handover.from_old(audio[row]) if run is old else handover.from_new(audio[row]) if run is new else []
                )
                if handover.is_over:
                    del self._handovers[place]
                    old.in_use.discard(place)
                    self._at[place] = new.group, new.places.index(place)
            elif self._at[place] == (run.group, row):
                pieces = [audio[row]]
            else:
                continue
            for piece in pieces:
                if piece.shape[1]:
                    self._audio_samples[place] += piece.shape[1]
                    made.append(ChannelAudio(place, piece))
        return made

    def _drop_idle(self) -> None:
        """Groups that all their channels have left are worked on no longer."""
        for k in reversed(range(len(self._runs))):
            if not self._runs[k].in_use:
                del self._runs[k]
                self._bank.drop(k)


def messages_of(channel: ChannelSettings) -> tuple[str, ...]:
    """Names of a channel's messages, as its audio's channels are labelled."""
    if channel.emission.is_double_sideband and channel.sideband != "both":
        return (channel.sideband,)
    return channel.emission.messages


def _blanker(channels: Sequence[ChannelSettings], rate_hz: float) -> ImpulseBlanker | None:
    """One for the whole capture, where any channel asks for it; the most sensitive threshold counts."""
    wanted = [channel.blanker_db for channel in channels if channel.blanker_db != OFF]
    if not wanted:
        return None
    return ImpulseBlanker(rate_hz, min(AUTO_DB if one == AUTO else float(one) for one in wanted))


def _check_inside(channel: ChannelSettings, info: SourceInfo) -> None:
    half_hz = info.sample_rate_hz / 2.0
    if abs(channel.frequency_hz - info.centre_hz) > half_hz:
        low, high = format_frequency(info.centre_hz - half_hz), format_frequency(info.centre_hz + half_hz)
        raise SettingError(
            "frequency", format_frequency(channel.frequency_hz), f"the capture reaches from {low} to {high}"
        )
