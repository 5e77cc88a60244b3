"""Which of several lines is the reference.

A full carrier is the strongest line; the line of a power of the signal is the one that stands out best. Beside a pilot,
a steady tone of the message may be the stronger line. Then the place decides: a line that lies where the message of
another line would lie belongs to that message; of what is left, the one nearest to the nominal frequency is the pilot.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.track import Follow
from rxchain.streams import Bools, Counts, Floats

_SLACK_HZ = 12.0  # two bins: a line's place is known no better
_NEAR_PEERS_DB = 10.0  # lines weaker than this against the strongest left are not taken for the pilot


class LineChoice:
    """The rule of one kind of following.

    sides : for a pilot, where each channel's message lies: +1 above, -1 below, 0 both sides.
    """

    def __init__(self, follow: Follow, message_hz: tuple[float, float], sides: Sequence[int]) -> None:
        self._follow = follow
        self._message_hz = message_hz
        self._sides: Counts = np.array(sides, np.int64)

    def choose(
        self,
        channel: int,
        offsets_hz: Floats,
        contrast_db: NDArray[np.float32],
        level_db: NDArray[np.float32],
        threshold_db: float,
    ) -> int:
        """Index of the line among the bins of one channel; at least one of them passes the threshold."""
        passing = contrast_db > threshold_db
        if self._follow is Follow.CARRIER:
            return int(np.argmax(np.where(passing, level_db, -np.inf)))
        if self._follow is not Follow.PILOT:
            return int(np.argmax(contrast_db))
        lines = np.flatnonzero(_peaks(contrast_db, passing))
        if self._sides[channel] != 0:
            lines = lines[self._unexplained(offsets_hz[lines], channel)]
            lines = lines[level_db[lines] > level_db[lines].max() - _NEAR_PEERS_DB]
        return int(lines[np.argmin(np.abs(offsets_hz[lines]))])

    def in_message(self, channels: Counts, beyond_hz: Floats) -> Bools:
        """Whether lines that lie so far above each channel's pilot would belong to its message."""
        if self._follow is not Follow.PILOT:
            return np.zeros(np.shape(beyond_hz), np.bool_)
        side = self._sides[channels]
        distance_hz = np.where(side == 0, np.abs(beyond_hz), side * beyond_hz)
        low_hz, high_hz = self._message_hz
        inside: Bools = (distance_hz > max(low_hz - _SLACK_HZ, _SLACK_HZ)) & (distance_hz < high_hz + _SLACK_HZ)
        return inside

    def _unexplained(self, lines_hz: Floats, channel: int) -> Bools:
        """Lines that do not lie in the message of any other line; all of them where that leaves none."""
        beyond_hz = lines_hz[:, None] - lines_hz[None, :]
        inside = self.in_message(np.full(beyond_hz.shape, channel), beyond_hz)
        alone: Bools = np.logical_not(np.any(inside, axis=1))
        return alone if np.any(alone) else np.ones(len(lines_hz), np.bool_)


def _peaks(contrast_db: NDArray[np.float32], passing: Bools) -> Bools:
    padded = np.pad(contrast_db, 1, constant_values=-np.inf)
    peaks: Bools = passing & (contrast_db >= padded[:-2]) & (contrast_db >= padded[2:])
    return peaks
