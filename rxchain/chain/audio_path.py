"""From detected messages to audio as delivered: gain, gate, and the rate that files want."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from rxchain.audio.gain_control import GainControl, GainSettings
from rxchain.audio.notch import ToneNotch
from rxchain.audio.rate_conversion import RateConverter
from rxchain.audio.squelch import Gate
from rxchain.chain.channel_settings import AUTO, OFF, AutoOrLevel, ChannelSettings
from rxchain.chain.group_tap import Tap
from rxchain.streams import Bools, FloatBlock, Floats

_LEVEL_MEMORY_S = 0.3


class AudioPath:
    """Notch, gain control, squelch gate and rate conversion of a group of channels.

    process(audio, open_steps) : float32, (channels, messages, n) and the squelch's decisions. Returns audio at
        ``rate_hz``, by default the channel's own where that is whole; with ``agc=off`` and ``squelch=off`` it is the
        detected message times exactly 1.
    """

    def __init__(
        self,
        channels: Sequence[ChannelSettings],
        n_messages: int,
        squelch_step: int,
        channel_rate_hz: float,
        live: bool,
        rate_hz: float | None = None,
    ) -> None:
        n = len(channels)
        self._channel_rate_hz = channel_rate_hz
        fixed_db = np.array([fixed_gain_db(channel.agc_db) for channel in channels])
        always = np.array([channel.squelch_db == OFF for channel in channels])
        self.is_automatic: Bools = np.isnan(fixed_db)
        self._gain = GainControl(GainSettings(), fixed_db, n_messages, channel_rate_hz, live)
        tones_hz = [_tone_hz(channel.notch_hz) for channel in channels]
        is_notched = any(tone is not None for tone in tones_hz)
        self._notch = ToneNotch(tones_hz, n_messages, channel_rate_hz) if is_notched else None
        self._gate = Gate(n, n_messages, squelch_step, channel_rate_hz, always)
        self.rate_hz = rate_hz or delivered_rate_hz(channel_rate_hz)
        self._converter = (
            None if self.rate_hz == channel_rate_hz else RateConverter(n, n_messages, channel_rate_hz, self.rate_hz)
        )
        self._power = np.zeros((n, n_messages))
        self.tap: Tap | None = None
        stages = (self._gain, self._notch, self._converter)
        self.delay_samples = sum(stage.delay_samples for stage in stages if stage is not None)

    def tap_rows(self, rows: Sequence[int]) -> Tap:
        """From now on the ungated audio of these rows is kept as well."""
        n_messages = self._power.shape[1]
        rates = self._channel_rate_hz, self.rate_hz
        converter = None if self._converter is None else RateConverter(len(rows), n_messages, *rates)
        self.tap = Tap(rows, converter)
        return self.tap

    @property
    def gain_db(self) -> Floats:
        """Gain in force, (channels,)."""
        return self._gain.gain_db

    @property
    def level_dbfs(self) -> Floats:
        """Level of the delivered audio over the last moments, (channels, messages)."""
        return np.asarray(10.0 * np.log10(np.maximum(self._power, 1e-20)))

    def process(self, audio: FloatBlock, open_steps: Bools) -> FloatBlock:
        """Delivered audio as far as it is complete."""
        levelled = self._gain.process(audio if self._notch is None else self._notch.process(audio))
        if self.tap is not None:
            self.tap.take(levelled)
        return self._deliver(self._gate.process(levelled, open_steps))

    def flush(self, open_steps: Bools) -> FloatBlock:
        """The tail."""
        rest = None if self._notch is None else self._gain.process(self._notch.flush())
        levelled = self._gain.flush()
        if rest is not None:
            levelled = np.concatenate([rest, levelled], axis=2)
        if self.tap is not None:
            self.tap.take(levelled)
            self.tap.finish()
        tail = self._deliver(self._gate.process(levelled, open_steps))
        return tail if self._converter is None else np.concatenate([tail, self._converter.flush()], axis=2)

    def _deliver(self, audio: FloatBlock) -> FloatBlock:
        n = audio.shape[2]
        if n:
            weight = np.exp(-n / (_LEVEL_MEMORY_S * self.rate_hz))
            self._power = weight * self._power + (1 - weight) * np.mean(np.square(audio), axis=2)
        return audio if self._converter is None else self._converter.process(audio)


def fixed_gain_db(agc: AutoOrLevel) -> float:
    """The gain of a channel whose gain is fixed, nan where it is automatic."""
    if agc == AUTO:
        return float("nan")
    return 0.0 if agc == OFF else float(agc)


def _tone_hz(notch: AutoOrLevel) -> float | None:
    if notch == OFF:
        return None
    return float("nan") if notch == AUTO else float(notch)


def delivered_rate_hz(channel_rate_hz: float) -> float:
    """The channel's own rate where that is a whole number, else the whole number of kilohertz below it."""
    if float(channel_rate_hz).is_integer():
        return channel_rate_hz
    return max(1_000.0, 1_000.0 * math.floor(channel_rate_hz / 1_000.0))
