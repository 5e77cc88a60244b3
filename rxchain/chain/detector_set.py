"""The detectors a group runs, and which of them each channel is heard through."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.track import Follow, Turned
from rxchain.chain.channel_settings import AUTO, ChannelSettings
from rxchain.chain.detector_taps import coherent_taps, envelope_band, message_taps
from rxchain.chain.grouping import GroupKind
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.envelope import RECTIFIER_GAIN, EnvelopeDetector
from rxchain.detectors.picker import DetectorPicker, PickedChannel
from rxchain.detectors.switch import DetectorSwitch
from rxchain.detectors.weighted_sidebands import WeightedSidebands
from rxchain.kernels.fir import ComplexTaps, centred
from rxchain.streams import ComplexBlock, FloatBlock

# Emissions whose envelope is not that of a plain double sideband need more room before theirs is filtered.
_OVERSAMPLING, _OVERSAMPLING_SIDED = 2, 4
# Samples that a detector takes at a time: more cost less a sample and wait longer.
_HOP, _HOP_LIVE = 512, 64
_REMEMBERED = 1_000  # reasons of each channel


class DetectorSet:
    """All detectors of a group, the picker between them where there is a choice, and the switch that carries it out."""

    def __init__(self, kind: GroupKind, channels: Sequence[ChannelSettings], rate_hz: float, usable_hz: float) -> None:
        self._kind, self._rate_hz = kind, rate_hz
        self._channels = channels
        self._names = kind.candidates
        self._detectors = [_detector(name, channels, rate_hz, kind.live) for name in self._names]
        self.delay_samples = max(detector.delay_samples for detector in self._detectors)
        self._picker: DetectorPicker | None = None
        self._served = np.zeros((len(channels), len(self._names)), np.int64)
        self._reasons = [[""] * len(self._names) for _ in channels]
        self._steps = 0
        self._said: list[deque[tuple[int, str, str]]] = [deque(maxlen=_REMEMBERED) for _ in channels]
        if len(self._names) > 1:
            picked = [PickedChannel(c.emission, c.audio_hz, c.vestige_hz, self._names) for c in channels]
            self._picker = DetectorPicker(picked, rate_hz, usable_hz)
            # The choices for the step before the present one, for it, and for those after it that are known.
            self._chosen = np.full((len(channels), 1), -1, np.int8)
            self._in_step = 0
            self._switch = DetectorSwitch(
                len(channels), kind.n_messages, len(self._names), self._picker.step_samples, rate_hz
            )

    def process(self, turned: Turned, upright: ComplexBlock) -> FloatBlock:
        """The chosen audio, (channels, messages, n), as far as it is complete."""
        if self._picker is None:
            return self._run(0, self._detectors[0].process(upright))
        choices = self._picker.process(turned).candidate
        self._note(choices)
        nothing = np.zeros((len(self._channels), self._kind.n_messages, 0), np.float32)
        parts = [self._switch.process([nothing] * len(self._names), choices)]
        self._chosen = np.concatenate([self._chosen, choices], axis=1)
        step, done = self._picker.step_samples, 0
        while done < upright.shape[1]:
            n = min(upright.shape[1] - done, step - self._in_step)
            self._activate()
            piece = upright[:, done : done + n]
            audio = [self._run(k, detector.process(piece)) for k, detector in enumerate(self._detectors)]
            parts.append(self._switch.process(audio, choices[:, :0]))
            done += n
            self._in_step = (self._in_step + n) % step
            if self._in_step == 0:
                self._chosen = self._chosen[:, 1:]
        return np.concatenate(parts, axis=2)

    def flush(self) -> FloatBlock:
        """The tail."""
        audio = [self._run(k, detector.flush()) for k, detector in enumerate(self._detectors)]
        if self._picker is None:
            return audio[0]
        return self._switch.process(audio, np.zeros((len(self._channels), 0), np.int8))

    def _note(self, choices: NDArray[np.int8]) -> None:
        """Keeps what served how long, and why."""
        for step in choices.T:
            self._served[np.arange(len(step)), step] += 1
        if self._picker is not None and choices.shape[1]:
            for row, (reason, chosen) in enumerate(zip(self._picker.reasons(), choices[:, -1], strict=True)):
                self._reasons[row][chosen] = reason
                self._remember(row, self._names[chosen], reason)
        self._steps += choices.shape[1]

    def _remember(self, row: int, name: str, reason: str) -> None:
        said = self._said[row]
        if not said or said[-1][1:] != (name, reason):
            said.append((self._steps, name, reason))

    def in_words_at(self, row: int, seconds: float, was_locked: bool) -> tuple[str, str]:
        """The detector that served a channel at a time, seconds of the group's stream, and the reason given then."""
        if self._picker is None:
            return self.in_words(row, was_locked)
        step = seconds * self._rate_hz / self._picker.step_samples
        said = [(name, reason) for at, name, reason in self._said[row] if at <= step]
        name, reason = said[-1] if said else (self._said[row][0][1:] if self._said[row] else (self._names[0], ""))
        return ("coherent" if name in ("upper", "lower") else name), reason

    def _activate(self) -> None:
        """Detectors run where they are chosen for this step or were for the one before: a change is faded within it."""
        before, now = self._chosen[:, 0], self._chosen[:, 1]
        for k, detector in enumerate(self._detectors):
            detector.active_rows = np.flatnonzero((before == k) | (now == k))

    def in_words(self, row: int, was_locked: bool) -> tuple[str, str]:
        """The detector that served a channel most, and the reason it last gave."""
        channel = self._channels[row]
        if self._picker is None:
            name = self._names[0]
            if name == "weighted":
                strength = "both sidebands, each weighted by its strength of the moment"
                return "coherent", strength if was_locked else self._only_way(channel, was_locked)
            asked = channel.detector != AUTO and len(channel.emission.detectors) > 1
            return name, "asked for" if asked else self._only_way(channel, was_locked)
        chosen = int(np.argmax(self._served[row]))
        name = self._names[chosen]
        return ("coherent" if name in ("upper", "lower") else name), self._reasons[row][chosen]

    def _run(self, place: int, audio: FloatBlock) -> FloatBlock:
        return audio * RECTIFIER_GAIN if self._names[place] == "rectifier" else audio

    def _only_way(self, channel: ChannelSettings, was_locked: bool) -> str:
        nominal = "beat against the nominal frequency"
        if channel.emission.family == "A1A":
            return f"keyed carrier: beat note at {channel.beat_hz:g} Hz"
        match self._kind.follow:
            case Follow.NOMINAL:
                shifted = f", shifted by {channel.align_hz:+g} Hz" if channel.align_hz else ""
                return f"no carrier to follow: {nominal}{shifted}"
            case Follow.SPEECH if was_locked:
                return "no carrier sent: turned to where the voice's harmonics line up"
            case Follow.SPEECH:
                return f"no carrier sent and no voice to align by: {nominal}"
            case Follow.PILOT if was_locked:
                return "the message lies beside a carrier: locked to it"
            case Follow.PILOT:
                return f"no pilot found: {nominal}"
            case Follow.SQUARE if was_locked:
                return "no carrier sent: followed by the line of the squared signal"
            case Follow.SQUARE:
                return f"no carrier sent and no mirrored sidebands found: {nominal}"
            case _ if was_locked:
                return "locked to the carrier"
        return f"no carrier found: {nominal}"


def _detector(
    name: str, channels: Sequence[ChannelSettings], rate_hz: float, live: bool
) -> CoherentDetector | EnvelopeDetector:
    hop = _HOP_LIVE if live else _HOP
    if name in ("envelope", "rectifier"):
        sided = any(channel.emission.side is not None for channel in channels)
        return EnvelopeDetector(
            [envelope_band(channel, rate_hz, live) for channel in channels],
            [message_taps(channel, rate_hz, live) for channel in channels],
            _OVERSAMPLING_SIDED if sided else _OVERSAMPLING,
            hop,
        )
    if name == "weighted":
        pairs = [[coherent_taps(one, rate_hz, side)[0] for side in ("upper", "lower")] for one in channels]
        longest = max(len(taps) for pair in pairs for taps in pair)
        weighted = np.array([[centred(taps, longest) for taps in pair] for pair in pairs])
        return WeightedSidebands(weighted, len(channels), rate_hz, hop)
    sideband = name if name in ("upper", "lower") else None
    filters: list[list[ComplexTaps]] = [coherent_taps(channel, rate_hz, sideband, live) for channel in channels]
    longest = max(len(taps) for filters_of in filters for taps in filters_of)
    taps = np.array([[centred(taps, longest) for taps in filters_of] for filters_of in filters])
    return CoherentDetector(taps, len(channels), hop)
