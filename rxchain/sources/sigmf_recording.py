"""A SigMF recording: metadata through the sigmf library, samples read a piece at a time.

Several captures make one stream: where ``core:global_index`` is given, or else where ``core:datetime`` of two captures
says that time passed between them, the difference is a gap. A difference of less than a millisecond is put down to the
clock that wrote the times. Captures at different frequencies are different streams; one of them is chosen by number.
"""

from __future__ import annotations

import datetime as dt
import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from rxchain.errors import SettingError, SourceError
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.raw_recording import file_size
from rxchain.sources.sample_file import Stretch, block_length, read_blocks
from rxchain.sources.sample_formats import BY_SIGMF_NAME, SampleFormat
from rxchain.streams import Block
from rxchain.units import format_frequency

_CLOCK_SLACK_S = 1e-3
_LARGEST_METADATA_BYTES = 64_000_000


class SigmfRecording:
    """Samples of a ``.sigmf-meta`` / ``.sigmf-data`` pair or a ``.sigmf`` archive, whichever is named.

    capture : number, from 0, of the capture to take where their frequencies differ.
    """

    def __init__(self, path: Path, capture: int | None = None, block_samples: int | None = None) -> None:
        if path.suffix == ".sigmf":
            meta, self._path, base_offset, data_bytes = _open_archive(path)
        else:
            meta_path = path.with_suffix(".sigmf-meta")
            file_size(meta_path)
            meta = _read_metadata(
                meta_path.read_bytes() if file_size(meta_path) < _LARGEST_METADATA_BYTES else b"", meta_path
            )
            self._path = _data_path(meta_path, meta)
            base_offset, data_bytes = 0, file_size(self._path)
        name = _printable(path.name)
        _validate(meta, path)
        self._format = _format(meta, path)
        rate_hz = _rate(meta, path)
        captures = _captures(meta, path, capture)
        stretches, n_samples = _stretches(captures, meta, self._format, rate_hz, base_offset, data_bytes, path)
        self._stretches = stretches
        self._block_samples = block_samples or block_length(rate_hz)
        centre_hz = captures[0][1].get("core:frequency")
        if centre_hz is None:
            raise SourceError(f"{name}: its capture has no core:frequency; add it to the metadata")
        self._info = SourceInfo("recording", name, rate_hz, float(centre_hz), _time(captures[0][1]), n_samples)

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample."""
        return self._info

    def blocks(self) -> Iterator[Block]:
        """All samples in order; gaps between captures are reported as lost samples."""
        return read_blocks(self._path, self._format, self._stretches, self._block_samples)

    def close(self) -> None:
        """Nothing stays open between blocks' readers."""


def _open_archive(path: Path) -> tuple[dict[str, Any], Path, int, int]:
    """Metadata of an archive's one recording, and where its data lie in the archive (stored uncompressed)."""
    import tarfile

    file_size(path)
    try:
        with tarfile.open(path, "r:") as archive:
            members = {Path(member.name).suffix: member for member in archive.getmembers() if member.isfile()}
            meta, data = members.get(".sigmf-meta"), members.get(".sigmf-data")
            if meta is None or data is None or meta.size > _LARGEST_METADATA_BYTES:
                raise SourceError(f"{path}: an archive holds one .sigmf-meta and one .sigmf-data")
            file = archive.extractfile(meta)
            return _read_metadata(file.read() if file else b"", path), path, data.offset_data, data.size
    except tarfile.TarError as error:
        raise SourceError(f"{path}: not an uncompressed SigMF archive: {error}") from error


def _read_metadata(data: bytes, path: Path) -> dict[str, Any]:
    try:
        meta = json.loads(data)
    except (ValueError, RecursionError) as error:
        raise SourceError(f"{path}: not SigMF metadata: {error}") from error
    if not isinstance(meta, dict) or not all(isinstance(meta.get(key), kind) for key, kind in _TOP_LEVEL.items()):
        raise SourceError(f"{path}: not SigMF metadata: global, captures and annotations are needed")
    return meta


_TOP_LEVEL = {"global": dict, "captures": list, "annotations": list}


def _validate(meta: dict[str, Any], path: Path) -> None:
    """The library's own check of the metadata against the standard's schema."""
    import warnings

    from sigmf import validate
    from sigmf.error import SigMFError

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # extensions it does not know are none of ours either
            validate.validate(meta)
    except (SigMFError, ValueError, KeyError, TypeError) as error:
        raise SourceError(f"{path}: not valid SigMF: {_printable(str(error).splitlines()[0])}") from error
    except Exception as error:
        if type(error).__module__.partition(".")[0] != "jsonschema":
            raise
        raise SourceError(f"{path}: not valid SigMF: {_printable(str(error).splitlines()[0])}") from error


def _data_path(meta_path: Path, meta: dict[str, Any]) -> Path:
    dataset = meta["global"].get("core:dataset")
    if dataset is None:
        return meta_path.with_suffix(".sigmf-data")
    if not isinstance(dataset, str) or Path(dataset).name != dataset or dataset in ("", ".", ".."):
        raise SourceError(f"{meta_path}: core:dataset must name a file in the same folder")
    return meta_path.with_name(dataset)


def _format(meta: dict[str, Any], path: Path) -> SampleFormat:
    if meta["global"].get("core:num_channels", 1) != 1:
        raise SourceError(f"{path}: core:num_channels={meta['global']['core:num_channels']}: one channel is served")
    name = meta["global"].get("core:datatype")
    if name not in BY_SIGMF_NAME:
        raise SourceError(
            f"{path}: core:datatype={_printable(str(name))}: not served; one of cf32_le, ci16_le, ci8, cu8 is"
        )
    return BY_SIGMF_NAME[name]


def _rate(meta: dict[str, Any], path: Path) -> float:
    rate_hz = meta["global"].get("core:sample_rate")
    if not isinstance(rate_hz, int | float) or not math.isfinite(rate_hz) or rate_hz <= 0:
        raise SourceError(f"{path}: core:sample_rate={rate_hz}: a recording needs its sample rate")
    return float(rate_hz)


def _captures(meta: dict[str, Any], path: Path, chosen: int | None) -> list[tuple[int, dict[str, Any]]]:
    """The captures that make the stream, each with its place in the file's list."""
    captures = list(enumerate(meta["captures"]))
    if not captures:
        raise SourceError(f"{path}: has no captures")
    starts = [capture.get("core:sample_start", 0) for _, capture in captures]
    if any(not isinstance(start, int) or start < 0 for start in starts) or starts != sorted(starts):
        raise SourceError(f"{path}: its captures do not start one after the other")
    if chosen is not None:
        if not 0 <= chosen < len(captures):
            raise SettingError("capture", chosen, f"the recording has captures 0 to {len(captures) - 1}")
        return [captures[chosen]]
    frequencies = [capture.get("core:frequency") for _, capture in captures]
    if any(frequency != frequencies[0] for frequency in frequencies):
        listed = ", ".join(f"{k}: {format_frequency(f or 0.0)}" for k, f in enumerate(frequencies[:8]))
        raise SourceError(f"{path}: its captures lie at different frequencies ({listed}); choose one with --capture N")
    return captures


def _stretches(
    chosen: list[tuple[int, dict[str, Any]]],
    meta: dict[str, Any],
    sample_format: SampleFormat,
    rate_hz: float,
    base_offset: int,
    data_bytes: int,
    path: Path,
) -> tuple[list[Stretch], int]:
    """Where each chosen capture's samples lie, and the stream's length with its gaps."""
    everything = meta["captures"]
    headers = [int(capture.get("core:header_bytes", 0)) for capture in everything]
    total = (data_bytes - sum(headers)) // sample_format.sample_bytes
    starts = [int(capture.get("core:sample_start", 0)) for capture in everything]
    ends = [*starts[1:], total]
    stretches: list[Stretch] = []
    for place, capture in chosen:
        n_samples = min(ends[place], total) - starts[place]
        if n_samples <= 0:
            continue
        offset = base_offset + starts[place] * sample_format.sample_bytes + sum(headers[: place + 1])
        index = 0
        if stretches:
            last = stretches[-1]
            index = last.index + last.n_samples + _gap(chosen[0][1], capture, last, rate_hz)
        stretches.append(Stretch(offset, n_samples, index))
    if not stretches:
        raise SourceError(f"{path}: holds no samples")
    return stretches, stretches[-1].index + stretches[-1].n_samples


def _gap(first: dict[str, Any], capture: dict[str, Any], last: Stretch, rate_hz: float) -> int:
    """Samples that are missing between the last stretch and a capture; 0 where nothing tells of any."""
    expected = last.index + last.n_samples
    if "core:global_index" in first and "core:global_index" in capture:
        return max(0, int(capture["core:global_index"]) - int(first["core:global_index"]) - expected)
    started, resumed = _time(first), _time(capture)
    if started is None or resumed is None:
        return 0
    missing_s = (resumed - started).total_seconds() - expected / rate_hz
    return round(missing_s * rate_hz) if missing_s >= _CLOCK_SLACK_S else 0


def _time(capture: dict[str, Any]) -> dt.datetime | None:
    """A capture's time in UTC; None where it has none or one that is none."""
    text = capture.get("core:datetime")
    if not isinstance(text, str):
        return None
    try:
        time = dt.datetime.fromisoformat(text)
    except ValueError:
        return None
    return time.replace(tzinfo=dt.UTC) if time.tzinfo is None else time.astimezone(dt.UTC)


def _printable(text: str) -> str:
    """Text from a file, fit to be shown: no control characters, not endless."""
    return "".join(character if character.isprintable() else "?" for character in text)[:200]
