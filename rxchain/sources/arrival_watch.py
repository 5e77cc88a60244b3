"""Samples that a receiver's driver lost without a word, found by the clock.

A USB driver drops whole buffers when they are not fetched in time, and says nothing. But samples come at a steady rate:
where the stream lags behind the clock and does not catch up, what is missing was lost.
"""

from __future__ import annotations

import math

_LATE_S = 0.1
_WINDOW_S = 1.0
_LOSS_BUFFERS = 0.6  # less than one whole buffer, more than the wander of arrivals within a window


class ArrivalWatch:
    """Compares the count of samples with the time they took to come.

    late : buffers that came more than 100 ms after their time, a run of them counted once.
    """

    def __init__(self, rate_hz: float, buffer_samples: int) -> None:
        self._rate_hz = rate_hz
        self._loss_s = _LOSS_BUFFERS * buffer_samples / rate_hz
        self.late = 0
        self._is_late = False
        self._start_s = math.nan
        self.restart()

    def restart(self) -> None:
        """A stream begins anew."""
        self._samples = 0
        self._usual_s = self._least_s = math.inf
        self._window_start_s = math.nan

    def arrived(self, n_samples: int, now_s: float) -> int:
        """Takes note of a buffer; returns how many samples are found to be missing before it, mostly 0."""
        if self._samples == 0:
            self._start_s = self._window_start_s = now_s - n_samples / self._rate_hz
        self._samples += n_samples
        behind_s = now_s - self._start_s - self._samples / self._rate_hz
        self._usual_s = min(self._usual_s, behind_s)
        is_late = behind_s - self._usual_s > _LATE_S
        self.late += is_late and not self._is_late
        self._is_late = is_late
        self._least_s = min(self._least_s, behind_s)
        if now_s - self._window_start_s < _WINDOW_S:
            return 0
        missing_s = self._least_s - self._usual_s
        self._least_s, self._window_start_s = math.inf, now_s
        if missing_s < self._loss_s:
            self._usual_s += missing_s  # the two clocks disagree a little; that is followed
            return 0
        lost = round(missing_s * self._rate_hz)
        self._samples += lost
        return lost
