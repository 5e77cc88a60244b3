"""The files of one transmission: audio as FLAC, the channel's own I/Q as a SigMF recording that can be received again.

While a transmission lasts, both grow as plain numbers, flushed to the disk every second, so that a power cut costs a second
at most and what is left can be closed by the next run.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from rxchain import __version__
from rxchain.logbook.links import file_digest
from rxchain.logbook.store import CLIPS, UNFINISHED
from rxchain.streams import ComplexBlock, FloatBlock

_FULL_SCALE = float(1 - 2.0**-23)  # of 24-bit samples


class Clip:
    """A clip that is being written in a logbook's folder.

    key : names its files while they grow. messages : of its audio. about : what :func:`finish_clip` needs to know, kept by
        the store. Writing raises :class:`OSError` where the disk takes no more.
    """

    def __init__(self, folder: Path, key: str, messages: int) -> None:
        self._audio_path, self._iq_path = growing_paths(folder, key)
        self.messages = messages
        self._audio_path.parent.mkdir(exist_ok=True, mode=0o700)
        self._audio = _private(self._audio_path)
        self._iq = _private(self._iq_path)
        self._unsynced = 0

    def write_audio(self, audio: FloatBlock) -> None:
        """Appends audio, float32, (messages, n)."""
        _write(self._audio, np.ascontiguousarray(audio.T).tobytes())

    def write_iq(self, iq: ComplexBlock) -> None:
        """Appends the channel's samples, complex64, (n,)."""
        _write(self._iq, iq.tobytes())

    def sync(self) -> None:
        """Makes what was written last through a power cut."""
        os.fdatasync(self._audio)
        os.fdatasync(self._iq)

    def close(self) -> None:
        """Ends writing; the files stay."""
        os.close(self._audio)
        os.close(self._iq)

    def discard(self) -> None:
        """Ends writing and removes the files."""
        self.close()
        for path in (self._audio_path, self._iq_path):
            path.unlink(missing_ok=True)


def growing_paths(folder: Path, key: str) -> tuple[Path, Path]:
    """Where a clip's audio and I/Q grow."""
    return folder / UNFINISHED / f"{key}.audio", folder / UNFINISHED / f"{key}.iq"


def finish_clip(folder: Path, key: str, about: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Turns what grew into the files that stay; returns their paths from the folder, sizes, digests and lengths.

    about : name, day (``2031-03-14``), audio_rate_hz, iq_rate_hz, messages (their number), frequency_hz, emission, start;
        audio_samples and iq_samples, where less is to be kept than was written.
    """
    audio_path, iq_path = growing_paths(folder, key)
    base = folder / CLIPS / str(about["day"]) / f"{key}"
    base.parent.mkdir(exist_ok=True, parents=True, mode=0o700)
    files = []
    if audio_path.exists():
        files.append(_finish_audio(audio_path, base.with_name(base.name + ".flac"), about))
    if iq_path.exists() and iq_path.stat().st_size >= 8:
        files += _finish_iq(iq_path, base, about)
    iq_path.unlink(missing_ok=True)
    for one in files:
        path = folder / CLIPS / str(about["day"]) / one["path"]
        one |= {"bytes": path.stat().st_size, "sha256": file_digest(path), "path": str(path.relative_to(folder))}
    return files


def _finish_audio(growing: Path, path: Path, about: Mapping[str, Any]) -> dict[str, Any]:
    import soundfile

    messages, rate_hz = int(about["messages"]), float(about["audio_rate_hz"])
    # What came after the transmission was written before its end was known.
    samples = min(growing.stat().st_size // (4 * messages), int(about.get("audio_samples", 1 << 62)))
    clipped = 0
    os.close(_private(path))
    with soundfile.SoundFile(path, "w", int(rate_hz), messages, subtype="PCM_24", format="FLAC") as file:
        for start in range(0, samples, 1 << 16):
            n = min(1 << 16, samples - start)
            part = np.fromfile(growing, "<f4", n * messages, offset=4 * messages * start).reshape(n, messages)
            clipped += int(np.count_nonzero(np.abs(part) > _FULL_SCALE))
            file.write(np.clip(part, -1.0, _FULL_SCALE))
    growing.unlink()
    return {"path": path.name, "kind": "audio", "seconds": samples / rate_hz, "clipped": clipped}


def _finish_iq(growing: Path, base: Path, about: Mapping[str, Any]) -> list[dict[str, Any]]:
    data, meta = base.with_name(base.name + ".sigmf-data"), base.with_name(base.name + ".sigmf-meta")
    samples = min(growing.stat().st_size // 8, int(about.get("iq_samples", 1 << 62)))
    os.truncate(growing, samples * 8)
    os.replace(growing, data)
    capture: dict[str, Any] = {"core:sample_start": 0, "core:frequency": float(about["frequency_hz"])}
    if about.get("start"):
        capture["core:datetime"] = about["start"]
    document = {
        "global": {
            "core:datatype": "cf32_le",
            "core:sample_rate": float(about["iq_rate_hz"]),
            "core:version": "1.2.0",
            "core:recorder": f"rxchain {__version__}",
            "core:description": f"{about['name']}: one channel, {about['emission']}",
        },
        "captures": [capture],
        "annotations": [],
    }
    os.close(_private(meta))
    meta.write_text(json.dumps(document, indent=1) + "\n", encoding="utf-8")
    seconds = samples / float(about["iq_rate_hz"])
    return [
        {"path": data.name, "kind": "iq", "seconds": seconds},
        {"path": meta.name, "kind": "iq description", "seconds": seconds},
    ]


def _private(path: Path) -> int:
    return os.open(path, os.O_WRONLY | os.O_CREAT | os.O_TRUNC | os.O_CLOEXEC, 0o600)


def _write(file: int, data: bytes) -> None:
    view = memoryview(data)
    while view:
        view = view[os.write(file, view) :]
