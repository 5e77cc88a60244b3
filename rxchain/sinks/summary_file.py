"""``summary.json``: what a run received, channel by channel, with every figure's uncertainty."""

from __future__ import annotations

import datetime as dt
import json
import math
import os
from pathlib import Path
from typing import Any

from rxchain import __version__
from rxchain.chain.channel_settings import ChannelSettings
from rxchain.chain.receiver import Receiver, messages_of
from rxchain.errors import SinkError
from rxchain.sinks.audio_file import AudioFile


def summary_of(receiver: Receiver, files: dict[int, list[tuple[AudioFile, str]]]) -> dict[str, Any]:
    """The summary as nested dictionaries; ``files`` has each channel's audio files and their SHA-256, the latest last."""
    info = receiver.info
    return {
        "rxchain": __version__,
        "source": {
            "kind": info.kind,
            "name": info.name,
            "sample_rate_hz": info.sample_rate_hz,
            "centre_hz": info.centre_hz,
            "start": utc_text(info.start),
            "samples": receiver.samples,
            "samples_lost": receiver.samples_lost,
            "gaps": receiver.gaps,
            "overload_fraction": receiver.overload_fraction,
        },
        "channels": [_channel(receiver, place, files.get(place)) for place in range(len(receiver.channels))],
    }


def write_summary(path: Path, summary: dict[str, Any]) -> None:
    """Writes the summary so that a reader sees the old file or the whole new one; raises :class:`SinkError`."""
    partial = path.with_name(path.name + ".part")
    try:
        partial.write_text(json.dumps(_finite(summary), indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
        os.replace(partial, path)
    except OSError as error:
        raise SinkError(f"{path}: cannot be written: {error}") from error


def utc_text(time: dt.datetime | None) -> str | None:
    """A time as ISO 8601 in UTC with a Z, None where unknown.

    >>> utc_text(dt.datetime(2031, 3, 14, 5, tzinfo=dt.timezone.utc))
    '2031-03-14T05:00:00Z'
    """
    if time is None:
        return None
    return time.astimezone(dt.UTC).isoformat().replace("+00:00", "Z")


def _channel(receiver: Receiver, place: int, written: list[tuple[AudioFile, str]] | None) -> dict[str, Any]:
    settings = receiver.channels[place]
    group, row = receiver.group_of(place)
    detector, reason = group.detector(row)
    emission, given, confidence = receiver.identified(place)
    locked, first_s = group.locked_fraction(row), group.first_lock_s(row)
    return {
        "name": settings.name,
        "frequency_hz": settings.frequency_hz,
        "emission": emission,
        "emission_given": given,
        "emission_confidence": confidence,
        "detector": detector,
        "detector_reason": reason,
        "audio": _audio(settings, written) if written else None,
        "locked_fraction": locked,
        "first_lock_s": first_s,
        "measured": receiver.figures(place).as_json(),
    }


def _audio(settings: ChannelSettings, written: list[tuple[AudioFile, str]]) -> dict[str, Any]:
    file, digest = written[-1]
    audio = {
        "path": file.path.name,
        "rate_hz": float(file.rate_hz),
        "messages": list(messages_of(settings))[: file.n_messages],
        "seconds": file.samples / file.rate_hz,
        "sha256": digest,
    }
    if len(written) > 1:
        audio["earlier"] = [
            {"path": one.path.name, "seconds": one.samples / one.rate_hz, "sha256": digest_of}
            for one, digest_of in written[:-1]
        ]
    return audio


def _finite(value: Any) -> Any:
    """JSON has no infinities: what is not finite is written as null."""
    if isinstance(value, dict):
        return {key: _finite(one) for key, one in value.items()}
    if isinstance(value, list):
        return [_finite(one) for one in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value
