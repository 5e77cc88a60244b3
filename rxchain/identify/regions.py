"""What belongs together: occupied bins joined into the bands of single emissions, with a place to look for a carrier."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from rxchain.identify.occupancy import SMOOTHED_BINS, Occupancy
from rxchain.streams import Bools, Floats

_JOIN_HZ = 260.0  # holes within the spectrum of a voice
_BESIDE_HZ = 900.0  # between a carrier and its sidebands, or the sidebands of a suppressed one
_LINE_DB, _LINE_HZ = 9.0, 220.0
_LEAST_SLOTS = 4  # a second: less is not named, and may be an impulse
_MIRRORED_HZ, _MIRRORED_DB, _FARTHEST_HZ = 120.0, 4.0, 5_500.0
_WIDEST_HZ = 11_000.0
_TOGETHER = 0.5  # of the slots of the rarer, in which both must be there
_GAP_SLOTS = 6  # pauses shorter than this are part of a transmission


@dataclass(frozen=True, slots=True)
class Region:
    """One emission's band, hertz from the capture's centre. line_hz : of the narrow line taken for its carrier, or None.
    times_s : when it was on, (start, end) in seconds of the capture. level : mean power in it while on, over all bins.
    """

    low_hz: float
    high_hz: float
    line_hz: float | None
    times_s: tuple[tuple[float, float], ...]
    level: float

    @property
    def width_hz(self) -> float:
        """Occupied width."""
        return self.high_hz - self.low_hz


@dataclass(slots=True)
class _Piece:
    first: int
    last: int
    slots: Bools
    has_line: bool
    line: int

    def width(self) -> int:
        return self.last - self.first + 1


def joined_pairs(regions: list[Region], seen: Occupancy) -> list[tuple[int, Region]]:
    """Neighbours that may be the two unlike sides of one suppressed carrier: the lower one's place, and both as one."""
    pairs = []
    for place, (one, other) in enumerate(pairwise(regions)):
        is_near = other.low_hz - one.high_hz <= _BESIDE_HZ and other.high_hz - one.low_hz <= _WIDEST_HZ
        if is_near and one.line_hz is None and other.line_hz is None:
            level = one.level + other.level
            pairs.append((place, Region(one.low_hz, other.high_hz, None, _either(one, other, seen.slot_s), level)))
    return pairs


def find_regions(seen: Occupancy) -> list[Region]:
    """The emissions' bands, lowest first."""
    active = seen.is_occupied.sum(axis=0) >= min(_LEAST_SLOTS, max(1, len(seen.is_occupied) // 2))
    pieces = _joined(_runs(active, seen), seen)
    return [_region(piece, seen) for piece in pieces]


def _runs(active: Bools, seen: Occupancy) -> list[_Piece]:
    """Occupied bins without holes wider than those within a voice."""
    places = np.flatnonzero(active)
    if not len(places):
        return []
    hole = max(2, round(_JOIN_HZ / seen.bin_hz))
    cuts = np.flatnonzero(np.diff(places) > hole)
    starts, ends = np.concatenate([[0], cuts + 1]), np.concatenate([cuts, [len(places) - 1]])
    return [_piece(int(places[a]), int(places[b]), seen) for a, b in zip(starts, ends, strict=True)]


def _piece(first: int, last: int, seen: Occupancy) -> _Piece:
    slots: Bools = np.asarray(seen.is_occupied[:, first : last + 1].any(axis=1))
    low, high = max(0, first - 12), min(len(seen.frequency_hz), last + 13)
    # The mean of logarithms over the time it was on: a carrier stays, a voice comes and goes.
    logs = 10.0 * np.log10(seen.power[slots][:, low:high] + 1e-30).mean(axis=0)
    reach = max(2, round(_LINE_HZ / seen.bin_hz))
    padded = np.pad(logs, reach, mode="reflect") if len(logs) > reach else np.pad(logs, reach, mode="edge")
    around = np.median(np.stack([padded[k : k + len(logs)] for k in range(2 * reach + 1)]), axis=0)
    inside = slice(first - low, last + 1 - low)
    rise = (logs - around)[inside]
    best = int(np.argmax(rise))
    return _Piece(first, last, slots, bool(rise[best] > _LINE_DB), first + best)


def _joined(pieces: list[_Piece], seen: Occupancy) -> list[_Piece]:
    """Sidebands with their carriers: neighbours that come and go together, and lines mirrored about a third."""
    pieces = _mirrored_lines(pieces, seen)
    near = round(_BESIDE_HZ / seen.bin_hz)
    joined: list[_Piece] = []
    for piece in pieces:
        before = joined[-1] if joined else None
        if before is not None and piece.first - before.last <= near and _belong(before, piece, seen):
            joined[-1] = _merged(before, piece, seen)
        else:
            joined.append(piece)
    return joined


def _belong(one: _Piece, other: _Piece, seen: Occupancy) -> bool:
    together = (one.slots & other.slots).sum() / max(1, min(one.slots.sum(), other.slots.sum()))
    width_hz = (other.last - one.first) * seen.bin_hz
    if together < _TOGETHER or width_hz > _WIDEST_HZ:
        return False
    narrow = round(_LINE_HZ / seen.bin_hz)
    is_line = [piece.has_line and piece.width() <= narrow for piece in (one, other)]
    if any(is_line):
        return True
    if one.has_line and other.has_line:
        return False
    # Two sidebands of one suppressed or reduced carrier are about as wide as each other.
    ratio = min(one.width(), other.width()) / max(one.width(), other.width())
    return ratio > 0.6 and one.width() * seen.bin_hz > 1_000.0


def _mirrored_lines(pieces: list[_Piece], seen: Occupancy) -> list[_Piece]:
    """Three narrow lines, the outer two alike and as far from the middle one: a carrier with a tone on it."""
    narrow = round(2 * _LINE_HZ / seen.bin_hz)
    level = [seen.power[p.slots][:, p.first : p.last + 1].sum(axis=1).mean() for p in pieces]
    for k in range(1, len(pieces) - 1):
        low, middle, high = pieces[k - 1 : k + 2]
        if max(low.width(), middle.width(), high.width()) > narrow:
            continue
        apart_hz = (low.line + high.line - 2 * middle.line) * seen.bin_hz
        alike = abs(10.0 * np.log10(level[k - 1] / level[k + 1])) < _MIRRORED_DB
        far_hz = (high.line - middle.line) * seen.bin_hz
        if abs(apart_hz) <= _MIRRORED_HZ and alike and far_hz <= _FARTHEST_HZ:
            whole = _merged(_merged(low, middle, seen), high, seen)
            whole.line, whole.has_line = middle.line, True
            return _mirrored_lines([*pieces[: k - 1], whole, *pieces[k + 2 :]], seen)
    return pieces


def _merged(one: _Piece, other: _Piece, seen: Occupancy) -> _Piece:
    strength = [seen.power[p.slots, p.line].mean() if p.has_line else 0.0 for p in (one, other)]
    line = one.line if strength[0] >= strength[1] else other.line
    return _Piece(one.first, other.last, np.asarray(one.slots | other.slots), one.has_line or other.has_line, line)


def _region(piece: _Piece, seen: Occupancy) -> Region:
    # The smoothing widens a band by two bins at either end; a line alone is as wide as the smoothing.
    spread = min(SMOOTHED_BINS // 2, (piece.width() - 1) // 2)
    half = (0.5 - spread) * seen.bin_hz
    band: Floats = seen.frequency_hz[[piece.first, piece.last]]
    level = float(seen.power[piece.slots][:, piece.first : piece.last + 1].sum(axis=1).mean())
    line_hz = float(seen.frequency_hz[piece.line]) if piece.has_line else None
    return Region(float(band[0] - half), float(band[1] + half), line_hz, _times(piece.slots, seen.slot_s), level)


def _either(one: Region, other: Region, slot_s: float) -> tuple[tuple[float, float], ...]:
    """When either was on."""
    spans = sorted(one.times_s + other.times_s)
    united = [list(spans[0])]
    for start, end in spans[1:]:
        if start <= united[-1][1] + _GAP_SLOTS * slot_s:
            united[-1][1] = max(united[-1][1], end)
        else:
            united.append([start, end])
    return tuple((start, end) for start, end in united)


def _times(slots: Bools, slot_s: float) -> tuple[tuple[float, float], ...]:
    places = np.flatnonzero(slots)
    cuts = np.flatnonzero(np.diff(places) > _GAP_SLOTS)
    starts, ends = np.concatenate([[0], cuts + 1]), np.concatenate([cuts, [len(places) - 1]])
    return tuple(
        (round(float(places[a]) * slot_s, 3), round(float(places[b] + 1) * slot_s, 3))
        for a, b in zip(starts, ends, strict=True)
    )
