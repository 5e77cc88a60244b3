"""Sums over chunks of time, one place a channel: what every figure but phase and depth is read from."""

from __future__ import annotations

from dataclasses import dataclass, field, fields

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Bools, Floats


@dataclass(slots=True)
class Tally:
    """Sums over chunks; each float64, (channels,) or (channels, rows).

    chunks, locked, by_quadrature : how many chunks in all, with the carrier followed, with noise read from quadrature.
    leaked : power of message taken out of the quadrature component.
    level, level_squared : mean power. message : power of each message, noise included; noise : the noise in it.
    floor, floor_error, floor_bias, noise_share : the channel's noise density, its relative error, the part of it that no
        length of time takes away, and the share of cells it rests on.
    sidebands, carrier : power of the sidebands with their noise, and of the carrier while locked.
    present : bool, of a single chunk: whether something was being sent.
    """

    n_channels: int
    n_messages: NDArray[np.int64]
    chunks: Floats = field(init=False)
    locked: Floats = field(init=False)
    by_quadrature: Floats = field(init=False)
    leaked: Floats = field(init=False)
    level: Floats = field(init=False)
    level_squared: Floats = field(init=False)
    message: Floats = field(init=False)
    noise: Floats = field(init=False)
    floor: Floats = field(init=False)
    floor_error: Floats = field(init=False)
    floor_bias: Floats = field(init=False)
    noise_share: Floats = field(init=False)
    sidebands: Floats = field(init=False)
    carrier: Floats = field(init=False)
    present: Bools = field(init=False)

    def __post_init__(self) -> None:
        for one in fields(self):
            if one.name in _ROWS:
                setattr(self, one.name, np.zeros((self.n_channels, 2)))
            elif one.name not in ("n_channels", "n_messages", "present"):
                setattr(self, one.name, np.zeros(self.n_channels))
        self.present = np.zeros(self.n_channels, bool)

    def add(self, other: Tally, which: Bools) -> None:
        """Adds another's sums where ``which``, (channels,)."""
        for one in fields(self):
            if one.name in ("n_channels", "n_messages", "present"):
                continue
            mine, its = getattr(self, one.name), getattr(other, one.name)
            if one.name in _ROWS:
                mine[:, : its.shape[1]] += np.where(which[:, None], its, 0.0)
            else:
                mine += np.where(which, its, 0.0)

    def keep_only(self, which: Bools) -> None:
        """Sets everything to zero where not ``which``."""
        for one in fields(self):
            if one.name in ("n_channels", "n_messages", "present"):
                continue
            value = getattr(self, one.name)
            setattr(self, one.name, value * (which[:, None] if one.name in _ROWS else which))

    def mean(self, name: str, channel: int) -> float:
        """A sum over the number of chunks it was taken over; 0 without any."""
        chunks = float(self.chunks[channel])
        return float(getattr(self, name)[channel]) / chunks if chunks else 0.0

    def floor_error_of(self, channel: int) -> float:
        """Relative error of the mean noise density: estimates share their window, so that a mean gains little."""
        windows = max(1.0, float(self.chunks[channel]) / 20.0)
        return float(np.hypot(self.mean("floor_error", channel) / np.sqrt(windows), self.mean("floor_bias", channel)))


_ROWS = ("message", "noise")
