"""The receiver: one bank, all groups of channels, one stream in, audio and figures of every channel out."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import numpy as np

from rxchain.chain.channel_group import ChannelGroup
from rxchain.chain.channel_settings import ChannelSettings
from rxchain.chain.grouping import grouped
from rxchain.chain.status import ChannelStatus
from rxchain.errors import SettingError
from rxchain.meters.figures import Figures
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block, FloatBlock, Floats, Reading
from rxchain.tuning.channel_bank import ChannelBank
from rxchain.tuning.plan import plan_bank
from rxchain.units import format_frequency

_SILENCE_PIECE = 1 << 18
_TREND_POINTS = 60
_SPECTRUM_PARTS = 480


@dataclass(frozen=True, slots=True)
class ChannelAudio:
    """New audio of one channel: float32, (messages, n), following on what came before."""

    place: int
    audio: FloatBlock


class Receiver:
    """Receives every channel of a stream.

    process(block) : the next block of the stream; returns the audio that has become complete, by channel.
    Lost samples are bridged by silence of the same length, so that audio stays on the clock; figures leave them out.
    """

    def __init__(self, info: SourceInfo, channels: tuple[ChannelSettings, ...]) -> None:
        self.info = info
        self.channels = channels
        plan = plan_bank(info.sample_rate_hz)
        for channel in channels:
            _check_inside(channel, info)
        members = grouped(channels, plan)
        self._places = [[place for place, _ in group] for group in members.values()]
        self._groups = [ChannelGroup(kind, [channel for _, channel in group], plan) for kind, group in members.items()]
        offsets_hz = [
            np.array([channel.frequency_hz - info.centre_hz for channel in group.channels]) for group in self._groups
        ]
        bins = [group.kind.bins for group in self._groups]
        self._bank = ChannelBank(plan, list(zip(bins, offsets_hz, strict=True)))
        self._at = {
            place: (group, row)
            for group, places in zip(self._groups, self._places, strict=True)
            for row, place in enumerate(places)
        }
        self.samples = self.samples_lost = self.gaps = self.overloaded = 0
        self._next_index: int | None = None
        trends = len(channels)
        self._offsets: list[deque[float]] = [deque(maxlen=_TREND_POINTS) for _ in range(trends)]
        self._snrs: list[deque[float]] = [deque(maxlen=_TREND_POINTS) for _ in range(trends)]
        self._trend_s = 0.0
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
        """Sample rate of a channel's audio."""
        return self._at[place][0].audio_rate_hz

    def process(self, block: Block) -> list[ChannelAudio]:
        """The audio that this block completes."""
        audio: list[ChannelAudio] = []
        if block.samples_lost:
            rate_hz = self.info.sample_rate_hz
            for group in self._groups:
                group.mark_lost(self.elapsed_s, block.samples_lost / rate_hz)
            self.gaps += 1
            left = block.samples_lost
            while left:
                n = min(left, _SILENCE_PIECE)
                audio += self._through(self._bank.process(np.zeros(n, np.complex64)))
                left -= n
            self.samples_lost += block.samples_lost
        self.overloaded += block.overloaded
        self.samples += len(block.iq)
        return audio + self._through(self._bank.process(block.iq))

    def flush(self) -> list[ChannelAudio]:
        """The last of every channel's audio; each is as long as the stream."""
        audio = self._through(self._bank.flush())
        for group, places in zip(self._groups, self._places, strict=True):
            audio += _by_channel(places, group.flush())
        return audio

    def figures(self, place: int) -> Figures:
        """A channel's figures since the start, as of the last :meth:`measure` with ``overall``."""
        return self._overall.get(place, Figures())

    def measure(self, overall: bool) -> None:
        """Brings the figures up to date: the recent ones, and those since the start where asked for."""
        for group, places in zip(self._groups, self._places, strict=True):
            self._recent.update(zip(places, group.recent_figures(), strict=True))
            if overall:
                self._overall.update(zip(places, group.overall_figures(), strict=True))
        if self.elapsed_s >= self._trend_s:
            self._trend_s = self.elapsed_s + 1.0
            for place in range(len(self.channels)):
                recent = self._recent[place]
                self._offsets[place].append(_value(recent.carrier_offset_hz))
                self._snrs[place].append(_value(recent.snr_db))

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
        return ChannelStatus(
            name=channel.name,
            frequency_hz=channel.frequency_hz,
            emission=channel.emission.name,
            emission_given=True,
            emission_confidence=1.0,
            detector=detector,
            detector_reason=reason,
            lock=group.lock_words()[row],
            open=bool(group.is_open[row]),
            messages=messages_of(channel),
            audio_hz=channel.audio_hz,
            audio_dbfs=tuple(float(level) for level in group.audio_dbfs[row]),
            gain_db=group.gain_db[row],
            recent=self._recent.get(place, Figures()),
            overall=self._overall.get(place, Figures()),
            offset_trend_hz=np.array(self._offsets[place], dtype=np.float64),
            snr_trend_db=np.array(self._snrs[place], dtype=np.float64),
        )

    def _through(self, blocks: list[np.ndarray]) -> list[ChannelAudio]:
        audio: list[ChannelAudio] = []
        for group, places, iq in zip(self._groups, self._places, blocks, strict=True):
            if iq.shape[1]:
                audio += _by_channel(places, group.process(iq))
        return audio


def messages_of(channel: ChannelSettings) -> tuple[str, ...]:
    """Names of a channel's messages, as its audio's channels are labelled."""
    if channel.emission.is_double_sideband and channel.sideband != "both":
        return (channel.sideband,)
    return channel.emission.messages


def _by_channel(places: list[int], audio: FloatBlock) -> list[ChannelAudio]:
    return [ChannelAudio(place, one) for place, one in zip(places, audio, strict=True)] if audio.shape[2] else []


def _check_inside(channel: ChannelSettings, info: SourceInfo) -> None:
    half_hz = info.sample_rate_hz / 2.0
    if abs(channel.frequency_hz - info.centre_hz) > half_hz:
        low, high = format_frequency(info.centre_hz - half_hz), format_frequency(info.centre_hz + half_hz)
        raise SettingError(
            "frequency", format_frequency(channel.frequency_hz), f"the capture reaches from {low} to {high}"
        )


def _value(reading: Reading | None) -> float:
    return float("nan") if reading is None else reading.value
