"""Identification of a source from request to words: reads it, or a part of it, and says what was found."""

from __future__ import annotations

import json
import os
import textwrap
from collections.abc import Iterator
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

from rxchain import __version__
from rxchain.cli.main import one_line
from rxchain.cli.source_options import parsed_options
from rxchain.errors import SettingError
from rxchain.identify.capture import Identified, identify_capture
from rxchain.sources.opening import open_source
from rxchain.sources.protocol import Source, SourceInfo
from rxchain.streams import Block
from rxchain.units import format_frequency

_LIVE_S = 10.0
_WIDTH = 100
_FROM = {"line": "carrier", "square": "sidebands", "voice": "voice", "edge": "band", "nominal": "band"}


class Excerpt:
    """The first seconds of a source, as a source; ``keep`` holds them in memory, to be read again."""

    def __init__(self, source: Source, seconds: float, keep: list[Block] | None = None) -> None:
        self._source, self._keep = source, keep
        self._samples = round(seconds * source.info.sample_rate_hz)

    @property
    def info(self) -> SourceInfo:
        """Of the whole source."""
        return self._source.info

    def blocks(self) -> Iterator[Block]:
        """As far as the seconds reach."""
        left = self._samples
        for block in self._source.blocks():
            block = Block(block.iq[:left], block.index, block.samples_lost, block.overloaded)
            left -= len(block.iq)
            if self._keep is not None:
                self._keep.append(Block(block.iq.copy(), block.index, block.samples_lost, block.overloaded))
            yield block
            if left <= 0:
                return

    def close(self) -> None:
        """Closes the source."""
        self._source.close()


class _Kept:
    """Blocks that were kept, as a source."""

    def __init__(self, info: SourceInfo, blocks: list[Block]) -> None:
        self.info, self._blocks = info, blocks

    def blocks(self) -> Iterator[Block]:
        yield from self._blocks

    def close(self) -> None:
        """Nothing to release."""


def identify(name: str, options: dict[str, str], seconds: float | None) -> tuple[SourceInfo, list[Identified]]:
    """What the source holds; raises :class:`~rxchain.errors.RequestError` where it cannot be read."""
    if name.lower().endswith(".toml"):
        raise SettingError("source", name, "a station file says what to receive", "name the recording itself")
    parsed = parsed_options(options)
    first = open_source(name, **parsed)
    if first.info.n_samples is None:
        keep: list[Block] = []
        excerpt = Excerpt(first, seconds or _LIVE_S, keep)
        readings: list[Source] = [excerpt]
        return identify_capture(lambda: readings.pop() if readings else _Kept(first.info, keep))
    first.close()

    def again() -> Source:
        source = open_source(name, **parsed)
        return source if seconds is None else Excerpt(source, seconds)

    return identify_capture(again)


def as_lines(info: SourceInfo, found: list[Identified]) -> Iterator[str]:
    """A table, its reasons below each row."""
    if not found:
        yield f"{one_line(info.name)}: noise only"
        return
    yield f"{'carrier':>16}  {'emission':<18} {'sure':>5}  {'or else':<24} {'occupied band':<27} on the air"
    for one in found:
        guess = one.guess
        runner_up = f"{guess.runner_up} ({100 * guess.runner_up_confidence:.0f} %)"
        band = f"{format_frequency(one.low_hz)} - {format_frequency(one.high_hz)}"
        name = f"{guess.name}" + ("" if guess.firm or not guess.is_emission else "?")
        yield (
            f"{format_frequency(round(one.frequency_hz, 1)):>16}  {name:<18} {100 * guess.confidence:>3.0f} %  "
            f"{runner_up:<24} {band:<27} {_times(one)}"
        )
        if guess.kind:
            yield f"{'':>18}{guess.kind}"
        for reason in guess.reasons:
            yield f"{'':>18}- {reason}"
        for note in guess.notes:
            yield from textwrap.wrap(f"note: {note}", _WIDTH, initial_indent=" " * 18, subsequent_indent=" " * 24)


def as_json(info: SourceInfo, found: list[Identified]) -> Iterator[str]:
    """The same as one JSON document."""
    document: dict[str, Any] = {
        "rxchain": __version__,
        "source": {
            "name": info.name,
            "sample_rate_hz": info.sample_rate_hz,
            "centre_hz": info.centre_hz,
            "start": info.start.isoformat().replace("+00:00", "Z") if info.start else None,
        },
        "emissions": [
            {
                "emission": one.guess.name,
                "confidence": round(one.guess.confidence, 4),
                "kind": one.guess.kind or None,
                "runner_up": one.guess.runner_up,
                "runner_up_confidence": round(one.guess.runner_up_confidence, 4),
                "frequency_hz": round(one.frequency_hz, 3),
                "frequency_from": _FROM[one.guess.reference],
                "band_hz": [round(one.low_hz, 1), round(one.high_hz, 1)],
                "times_s": [list(times) for times in one.times_s],
                "level_dbfs": round(float(one.level_dbfs), 2),
                "firm": one.guess.firm,
                "reasons": list(one.guess.reasons),
                "notes": list(one.guess.notes),
            }
            for one in found
        ],
    }
    yield json.dumps(document, indent=2)


def _times(one: Identified) -> str:
    spans = [f"{start:.1f}-{end:.1f} s" for start, end in one.times_s[:3]]
    return ", ".join(spans) + (f" and {len(one.times_s) - 3} more" if len(one.times_s) > 3 else "")
