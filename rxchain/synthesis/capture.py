"""A rendered scene as a SigMF recording whose annotations carry the truth, under this project's own names."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rxchain import __version__
from rxchain.errors import RequestError
from rxchain.streams import ComplexBlock
from rxchain.synthesis.render import RenderedScene, StationTruth
from rxchain.synthesis.scene import Scene

TRUTH_KEY = "rxchain:truth"
_PIECE = 1 << 20


def write_capture(scene: Scene, rendered: RenderedScene, out: Path) -> tuple[Path, int]:
    """Writes ``out.sigmf-data`` and ``out.sigmf-meta``; returns the latter and how many samples were clipped.

    Raises :class:`RequestError` where the files cannot be written.
    """
    base = out.with_suffix("") if out.suffix in (".sigmf-meta", ".sigmf-data", ".sigmf") else out
    data_path, meta_path = (base.with_name(base.name + suffix) for suffix in (".sigmf-data", ".sigmf-meta"))
    clipped = 0
    try:
        base.parent.mkdir(parents=True, exist_ok=True)
        with data_path.open("wb") as file:
            for start in range(0, len(rendered.iq), _PIECE):
                values, n = quantised(rendered.iq[start : start + _PIECE], scene.format)
                clipped += n
                file.write(values.tobytes())
        meta_path.write_text(json.dumps(_metadata(scene, rendered, data_path), indent=1) + "\n", encoding="utf-8")
    except OSError as error:
        raise RequestError(f"out={out}: cannot be written: {error.strerror or error}") from error
    return meta_path, clipped


def quantised(iq: ComplexBlock, sample_format: str) -> tuple[NDArray[np.generic], int]:
    """Interleaved components in a recording's format, and how many samples had to be clipped to fit it."""
    components = np.ascontiguousarray(iq).view(np.float32)
    if sample_format == "cf32_le":
        return components.astype("<f4"), 0
    dtype, scale, middle, low, high = {
        "ci16_le": ("<i2", 32768.0, 0.0, -32768, 32767),
        "ci8": ("i1", 128.0, 0.0, -128, 127),
        "cu8": ("u1", 127.5, 127.5, 0, 255),
    }[sample_format]
    rounded = np.rint(components * np.float32(scale) + np.float32(middle))
    outside = ((rounded < low) | (rounded > high)).reshape(-1, 2).any(axis=1)
    return np.clip(rounded, low, high).astype(dtype), int(np.count_nonzero(outside))


def truth_table(truth: StationTruth) -> dict[str, Any]:
    """The truth of one emission, as its annotation has it; figures that have no meaning are null."""
    station, how = truth.station, truth.station.how
    full = station.emission.has_depth
    table = {
        "name": station.name,
        "emission": station.emission.name,
        "frequency_hz": station.frequency_hz,
        "carrier_offset_hz": truth.carrier_offset_hz,
        "drift_hz_s": station.drift_hz_s,
        "audio_hz": list(station.audio_hz),
        "messages": list(station.emission.messages),
        "snr_db": None if truth.snr_db is None else list(truth.snr_db),
        "carrier_dbfs": truth.carrier_dbfs,
        "level_dbfs": station.level_dbfs,
        "vestige_hz": how.vestige_hz if station.emission.is_vestigial else None,
        "depth_percent": _depth(truth) if full and station.emission.family == "A3E" else None,
        "fading": station.fading is not None,
    }
    return {
        key: None if isinstance(value, float) and not math.isfinite(value) else value for key, value in table.items()
    }


def _depth(truth: StationTruth) -> float:
    """Half the peak-to-peak of the message over the carrier, percent."""
    carrier = 10.0 ** (truth.carrier_dbfs / 20.0)
    message = truth.messages[0]
    return float(100.0 * (message.max() - message.min()) / 2.0 / carrier)


def _metadata(scene: Scene, rendered: RenderedScene, data_path: Path) -> dict[str, Any]:
    import hashlib

    with data_path.open("rb") as file:
        digest = hashlib.file_digest(file, "sha512").hexdigest()
    capture: dict[str, Any] = {"core:sample_start": 0, "core:frequency": scene.centre_hz}
    if scene.start is not None:
        capture["core:datetime"] = scene.start.isoformat().replace("+00:00", "Z")
    return {
        "global": {
            "core:datatype": scene.format,
            "core:sample_rate": scene.rate_hz,
            "core:version": "1.2.0",
            "core:num_channels": 1,
            "core:sha512": digest,
            "core:recorder": f"rxchain {__version__}",
            "core:description": "A synthetic scene; each annotation carries the truth about one emission.",
            "core:extensions": [{"name": "rxchain", "version": "1.0.0", "optional": True}],
        },
        "captures": [capture],
        "annotations": [_annotation(truth) for truth in sorted(rendered.truths, key=lambda truth: truth.start_sample)],
    }


def _annotation(truth: StationTruth) -> dict[str, Any]:
    station = truth.station
    carrier_hz = station.frequency_hz + station.offset_hz
    high_hz = station.audio_hz[1]
    below_hz, above_hz = high_hz, high_hz
    if station.emission.side is not None:
        empty_hz = station.how.vestige_hz if station.emission.is_vestigial else 0.0
        below_hz, above_hz = (empty_hz, high_hz) if station.emission.side > 0 else (high_hz, empty_hz)
    return {
        "core:sample_start": truth.start_sample,
        "core:sample_count": max(1, truth.stop_sample - truth.start_sample),
        "core:freq_lower_edge": carrier_hz - below_hz,
        "core:freq_upper_edge": carrier_hz + above_hz,
        "core:label": f"{station.name} {station.emission.name}"[:100],
        TRUTH_KEY: truth_table(truth),
    }
