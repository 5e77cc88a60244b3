"""A snapshot of a running receiver, for whoever shows it: dashboard, plain lines, status stream."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

from rxchain.meters.figures import Figures
from rxchain.streams import Floats


@dataclass(frozen=True, slots=True)
class ChannelStatus:
    """One channel at the moment of the snapshot.

    lock : ``locked``, ``held``, ``none``, or ``nominal`` where there is nothing to lock to.
    open : whether the squelch lets audio through.
    audio_dbfs : level of the delivered audio over the last moments (rms against full scale), one figure a message.
    gain_db : gain the automatic gain control applies now; None where it is off.
    recent : figures over the last seconds; overall : figures since the start.
    offset_trend_hz : the last minute's offsets, oldest first, for a trend line; nan where not locked.
    snr_trend_db : likewise for the SNR.
    """

    name: str
    frequency_hz: float
    emission: str
    emission_given: bool
    emission_confidence: float
    detector: str
    detector_reason: str
    lock: str
    open: bool
    messages: tuple[str, ...]
    audio_hz: tuple[float, float]
    audio_dbfs: tuple[float, ...]
    gain_db: float | None
    recent: Figures
    overall: Figures
    offset_trend_hz: Floats
    snr_trend_db: Floats


@dataclass(frozen=True, slots=True)
class SoundStatus:
    """What is heard, and how it stands with the sound output.

    heard : names as ``--listen`` takes them; places : the same as places in the list of channels.
    delay_s : from a sample's arrival to its being heard, the longest of the last second; None where nothing plays.
    underruns : how often the output ran dry. skips : how often too much audio had piled up and was left out.
    losses : how often the output went away. speed : stream seconds a second of the output's clock.
    trouble : what is wrong with the output now, None where nothing is.
    """

    output: str
    heard: str
    places: tuple[int, ...]
    volume_db: float
    muted: bool
    delay_s: float | None
    underruns: int
    skips: int
    losses: int
    speed: float
    trouble: str | None


@dataclass(frozen=True, slots=True)
class ReceiverStatus:
    """The whole receiver at the moment of the snapshot.

    elapsed_s : stream time since the first sample. progress : 0 to 1 for a recording, None where there is no end.
    samples_lost, gaps, overload_fraction, late_blocks : the separate counts of what went wrong.
    spectrum_dbfs : mean power per bin across the capture, lowest frequency first; empty where not kept.
    source_trouble : what is wrong with the source now, None where nothing is. short_buffers, reopened : a receiver's
    buffers that came short, and how often it was lost and found again. gain_db : the receiver's gain where it is known.
    sound : how it stands with the sound, None where nobody listens.
    """

    source: str
    sample_rate_hz: float
    centre_hz: float
    start: dt.datetime | None
    elapsed_s: float
    progress: float | None
    speed: float | None
    samples_lost: int
    gaps: int
    overload_fraction: float
    late_blocks: int
    spectrum_dbfs: Floats
    channels: tuple[ChannelStatus, ...]
    source_trouble: str | None = None
    short_buffers: int = 0
    reopened: int = 0
    gain_db: float | None = None
    sound: SoundStatus | None = None
