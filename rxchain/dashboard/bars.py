"""Figures as bars of text, in block characters or in plain ASCII."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

# Audio SNR at which telephony is just usable, marginally and well readable (Recommendation ITU-R F.339; from memory,
# consistent with the quoted SNR densities).
GRADES_DB = (6.0, 15.0, 33.0)
SNR_SCALE_DB = 40.0
DEPTH_SCALE_PERCENT = 130.0
_FULL_PERCENT = 100.0


@dataclass(frozen=True, slots=True)
class Glyphs:
    """Characters to draw with: partial cells from empty to full, ticks, centre line, heights for trends."""

    partial: str
    tick: str
    centre: str
    over: str
    heights: str
    gap: str


BLOCKS = Glyphs(" ▏▎▍▌▋▊▉█", "╎", "│", "▓", "▁▂▃▄▅▆▇█", "·")
ASCII = Glyphs(" -=#", ":", "|", "%", "_.-=*#", " ")


def snr_bar(snr_db: float | None, width: int, glyphs: Glyphs) -> str:
    """SNR from 0 to 40 dB, with ticks where a higher grade of reception begins and is not yet reached.

    >>> snr_bar(20.0, 12, ASCII)
    '#####-   : '
    """
    cells = width - 1
    text = list(_partial(0.0 if snr_db is None else snr_db / SNR_SCALE_DB, cells, glyphs))
    for grade_db in GRADES_DB:
        place = min(cells - 1, int(grade_db / SNR_SCALE_DB * cells))
        if text[place] == glyphs.partial[0]:
            text[place] = glyphs.tick
    return "".join(text)


def depth_bar(negative_percent: float | None, positive_percent: float | None, half: int, glyphs: Glyphs) -> str:
    """Troughs to the left and crests to the right of the carrier's level; what lies beyond 100 % is drawn otherwise.

    >>> depth_bar(80.0, 120.0, 6, ASCII)
    '  ####|#####%'
    """
    left = _side(negative_percent, half, glyphs)
    return left[::-1] + glyphs.centre + _side(positive_percent, half, glyphs)


def trend(values: Sequence[float], width: int, glyphs: Glyphs) -> str:
    """The latest values as heights between their lowest and highest; a gap where there is none.

    >>> trend([1.0, 2.0, float("nan"), 3.0], 6, ASCII)
    '_- #'
    """
    latest = list(values)[-width:]
    known = [value for value in latest if math.isfinite(value)]
    if not known:
        return ""
    low, high = min(known), max(known)
    steps = len(glyphs.heights) - 1
    scale = steps / (high - low) if high > low else 0.0
    return "".join(
        glyphs.heights[round((value - low) * scale)] if math.isfinite(value) else glyphs.gap for value in latest
    )


def _partial(share: float, cells: int, glyphs: Glyphs) -> str:
    steps = len(glyphs.partial) - 1
    eighths = round(min(max(share, 0.0), 1.0) * cells * steps)
    full, rest = divmod(eighths, steps)
    text = glyphs.partial[-1] * full + (glyphs.partial[rest] if rest else "")
    return text.ljust(cells)[:cells]


def _side(percent: float | None, half: int, glyphs: Glyphs) -> str:
    if percent is None:
        return " " * half
    cells = round(min(max(percent, 0.0), DEPTH_SCALE_PERCENT) / DEPTH_SCALE_PERCENT * half)
    full = round(_FULL_PERCENT / DEPTH_SCALE_PERCENT * half)
    if percent > _FULL_PERCENT:
        cells = max(cells, full + 1)
    return (glyphs.partial[-1] * min(cells, full) + glyphs.over * max(0, cells - full)).ljust(half)
