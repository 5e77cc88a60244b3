"""The gain that keeps a receiver's converter just below overload.

Too little gain buries weak signals in the converter's own noise, too much overloads it, which spoils every channel at
once. The receiver's own control looks at the power in the tuner; this one looks at the samples that are received.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

HIGHEST_DBFS = -3.0  # peaks stay under this after a step up
_SETTLES_S = 0.1  # buffers in flight still have the gain of before
_UP_AFTER_S = 2.0
_OVERLOADED = 1e-5  # share of samples at the rails that asks for less gain


class Headroom:
    """Chooses among the tuner's gains, a step at a time: down at once, up after two seconds that left room.

    gains_db : the tuner's gains, ascending.
    """

    def __init__(self, gains_db: Sequence[float], rate_hz: float) -> None:
        self._gains_db, self._rate_hz = tuple(gains_db), rate_hz
        self._at = len(self._gains_db) // 2
        self._restart()

    @property
    def gain_db(self) -> float:
        """The gain to be set."""
        return self._gains_db[self._at]

    def _restart(self) -> None:
        self._watched_s = -_SETTLES_S
        self._peak = 0.0

    def see(self, n_samples: int, peak: float, overloaded: int) -> bool:
        """Takes note of a block (``peak`` : its largest component, full scale 1); True where the gain changes."""
        self._watched_s += n_samples / self._rate_hz
        if self._watched_s <= 0.0:
            return False
        self._peak = max(self._peak, peak)
        if overloaded > _OVERLOADED * n_samples and self._at > 0:
            self._at -= 1
            self._restart()
            return True
        if self._watched_s < _UP_AFTER_S:
            return False
        room_db = HIGHEST_DBFS - 20.0 * math.log10(max(self._peak, 1e-6))
        self._restart()
        if self._at + 1 < len(self._gains_db) and self._gains_db[self._at + 1] - self.gain_db <= room_db:
            self._at += 1
            return True
        return False
