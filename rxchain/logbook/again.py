"""Receives a logged transmission once more, from its narrow I/Q, with another detector or another band."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import numpy as np

from rxchain.chain.channel_settings import channel_from_table
from rxchain.chain.receiver import Receiver
from rxchain.errors import RequestError
from rxchain.logbook.clips import Clip, finish_clip
from rxchain.logbook.store import Entry, LogStore, read_entries
from rxchain.sources.sigmf_recording import SigmfRecording


def entry_of(folder: Path, number: int) -> Entry:
    """The entry of that number; raises :class:`RequestError`."""
    for entry in read_entries(folder):
        if entry.number == number:
            return entry
    raise RequestError(f"{folder}: there is no entry {number}")


def receive_again(folder: Path, number: int, keys: dict[str, str], now: dt.datetime) -> Entry:
    """Receives entry ``number`` anew, with these keys of a channel in place of the first ones; returns the new entry.

    Raises :class:`RequestError` where the entry has no I/Q, or a key's value breaks a rule.
    """
    old = entry_of(folder, number)
    iq = next((file for file in old.body.get("files", []) if file.get("kind") == "iq description"), None)
    if old.kind != "transmission" or iq is None or not (folder / iq["path"]).is_file():
        raise RequestError(f"{folder}: entry {number} has no I/Q to receive again")
    table: dict[str, object] = {
        "frequency": f"{old.body['frequency_hz']:.6f}Hz",
        "emission": old.body.get("received_as") or old.body["emission"],
        "name": str(old.body["channel"]),
        "squelch": "off",
    }
    if "emission" not in keys and old.body.get("audio_hz"):
        low_hz, high_hz = old.body["audio_hz"]
        table["audio"] = f"{low_hz:g}-{high_hz:g}Hz"
    settings = channel_from_table(table | keys)
    store = LogStore(folder)
    try:
        key = f"{settings.name}-again-{store.number + 1:08d}"
        receiver, files = _received(folder, folder / iq["path"], settings, key, old, now)
        detector, reason = receiver.group_of(0)[0].detector(0)
        emission, given, confidence = receiver.identified(0)
        body: dict[str, Any] = {
            **{
                name: old.body.get(name)
                for name in ("channel", "start", "end", "seconds", "stream_s", "frequency_hz", "what")
            },
            "of": number,
            "time": now.isoformat(),
            "keys": keys,
            "emission": emission,
            "emission_given": given,
            "emission_confidence": confidence,
            "received_as": receiver.channels[0].emission.name,
            "audio_hz": list(receiver.channels[0].audio_hz),
            "detector": detector,
            "detector_reason": reason,
            "measured": receiver.figures(0).as_json(),
            "files": files,
        }
        return store.append("transmission", body, key)
    finally:
        store.close()


def _received(
    folder: Path, recording: Path, settings: Any, key: str, old: Entry, now: dt.datetime
) -> tuple[Receiver, list[dict[str, Any]]]:
    source = SigmfRecording(recording, None)
    receiver = Receiver(source.info, (settings,))
    pieces: list[np.ndarray] = []
    try:
        for block in source.blocks():
            pieces += [one.audio for one in receiver.process(block)]
    finally:
        source.close()
    pieces += [one.audio for one in receiver.flush()]
    receiver.measure(overall=True)
    messages = len(pieces[-1]) if pieces else 1
    clip = Clip(folder, key, messages)
    for piece in pieces:
        clip.write_audio(
            piece if len(piece) == messages else np.repeat(piece.mean(axis=0, keepdims=True), messages, axis=0)
        )
    clip.close()
    about = {
        "name": settings.name,
        "day": (str(old.body.get("start") or now.isoformat()))[:10],
        "audio_rate_hz": receiver.audio_rate_hz(0),
        "messages": messages,
    }
    return receiver, finish_clip(folder, key, about)
