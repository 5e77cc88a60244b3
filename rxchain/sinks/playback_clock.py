"""Where in the stream the ear is, and how fast it goes: two clocks that do not agree, and neither may be heard to.

The speaker asks for samples by its own clock, the stream grows by the receiver's. The clock here is asked once for every
few milliseconds of speaker time. It watches how much audio is still unplayed just before each piece; the least of that
over a second is the true reserve, whatever the size and rhythm of the blocks that arrive. A proportional and an integral
term on it (critically damped, half a minute) set the speed, a few hundred millionths more or less than 1. Nothing is
dropped or repeated for that, so nothing clicks, and the reserve, which is the delay, stays where it was.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

_WINDOW_S = 1.0
_PROPORTIONAL = 0.05  # change of speed for a second of error
_INTEGRAL = _PROPORTIONAL**2 / 4.0  # critical damping of the second-order loop
_FASTEST = 1e-3  # a sixtieth of a semitone: unheard
_LEARNING_S = 0.1  # silence in which the rhythm of arrival is learnt before anything is played
_ARRIVALS = 3  # and at least so many arrivals are seen in it
_STARVED_S = 0.15  # nothing new for so long: the stream has stopped
_EXCESS_S = 0.04  # reserve beyond what is wanted, that is skipped instead of played fast
_SETTLED_S = 5.0  # of playing; what piles up or runs out before is of the start's making, and teaches nothing
_HOLE_WINDOW_S, _HOLE_EXCESS_S = 0.2, 0.01  # after the output ran dry: what it did not play is left out soon
_GUARD_S = 0.005
_SHYER_S = 0.010  # more reserve after every time it ran out
_LARGEST_RESERVE_S = 0.15


@dataclass(frozen=True, slots=True)
class Piece:
    """What to play next.

    start_s : stream time of its first sample; None: silence. speed : stream seconds a speaker second.
    is_last : silence follows, so that it must end at nothing.
    """

    start_s: float | None
    speed: float
    is_last: bool


class PlaybackClock:
    """Decides piece by piece what the speaker plays.

    piece_s : length of a piece, speaker time.
    underruns : how often the reserve ran out; skips : how often too much had piled up and was left out.
    """

    def __init__(self, piece_s: float) -> None:
        self._piece_s = piece_s
        self._needs_s = piece_s * (1 + _FASTEST)
        # Enough for a piece, and for the next one to be known when it begins: a fade must have somewhere to go.
        self._reserve_s = 2 * self._needs_s + _GUARD_S
        self.underruns = self.skips = 0
        self.speed_integral = 0.0
        self._speed = 1.0
        self.position_s = 0.0
        self._newest_s = -math.inf
        self._skip_s = 0.0
        self._hole = False
        self._ever_played_s = 0.0
        self.ending = False  # the stream has come to its end: running out is what is expected
        self.restart()

    @property
    def is_playing(self) -> bool:
        """Whether there is something to play."""
        return self._playing

    @property
    def speed(self) -> float:
        """Stream seconds a speaker second."""
        return self._speed

    def restart(self) -> None:
        """Forgets where it was, as after the output was away or another stream is listened to."""
        self._playing = False
        self._unchanged_s = math.inf
        self._learnt_s = 0.0
        self._arrivals = 0
        self._begin_window()

    def hole(self) -> None:
        """The output ran dry: it played nothing for a while, and what should have been played then is left out."""
        if self._playing:
            self._begin_window()
            self._hole = True

    def _begin_window(self) -> None:
        self._least_s, self._window_s, self._hole = math.inf, 0.0, False

    def shift(self, difference_s: float) -> None:
        """Goes elsewhere in the stream at once: what is heard now runs that much ahead of what was heard before."""
        self.position_s += difference_s
        self._begin_window()

    def next(self, newest_s: float) -> Piece:
        """The next piece; ``newest_s`` is the stream time up to which everything heard is there."""
        has_grown = newest_s > self._newest_s
        self._newest_s = newest_s
        self._unchanged_s = 0.0 if has_grown else self._unchanged_s + self._piece_s
        return self._play(newest_s) if self._playing else self._learn(newest_s)

    def _learn(self, newest_s: float) -> Piece:
        """Silence, during which the position runs along and sees by how much it is ahead at worst."""
        silence = Piece(None, 1.0, False)
        if self._unchanged_s > _STARVED_S:
            self._learnt_s, self._arrivals, self._least_s = 0.0, 0, math.inf
            self.position_s = newest_s
            return silence
        self._arrivals += self._unchanged_s == 0.0
        self._least_s = min(self._least_s, newest_s - self.position_s)
        self._learnt_s += self._piece_s
        self.position_s += self._piece_s
        if self._learnt_s >= _LEARNING_S and self._arrivals >= _ARRIVALS:
            self.shift(self._least_s - self._reserve_s)
            self._playing = True
        return silence

    def _play(self, newest_s: float) -> Piece:
        left_s = newest_s - self.position_s
        if self._skip_s:
            self.shift(self._skip_s)
            left_s, self._skip_s = left_s - self._skip_s, 0.0
        if left_s < self._needs_s:
            self.underruns += not self.ending
            if not self.ending and self._ever_played_s > _SETTLED_S:
                self._reserve_s = min(self._reserve_s + _SHYER_S, _LARGEST_RESERVE_S)
            self.restart()
            self._unchanged_s = 0.0
            return Piece(None, 1.0, False)
        self._ever_played_s += self._piece_s
        self._steer(left_s)
        piece = Piece(self.position_s, self._speed, self._skip_s > 0.0 or left_s < 2 * self._needs_s)
        self.position_s += self._piece_s * self._speed
        return piece

    def _steer(self, left_s: float) -> None:
        self._least_s = min(self._least_s, left_s)
        self._window_s += self._piece_s
        if self._window_s < (_HOLE_WINDOW_S if self._hole else _WINDOW_S):
            return
        error_s = self._least_s - self._reserve_s
        if error_s > (_HOLE_EXCESS_S if self._hole else _EXCESS_S):
            self.skips += self._ever_played_s > _SETTLED_S and not self._hole
            self._skip_s = error_s
        elif self._hole:
            pass  # too short a look to steer by
        else:
            integral = self.speed_integral + _INTEGRAL * error_s
            self.speed_integral = min(max(integral, -_FASTEST), _FASTEST)
            self._speed = 1.0 + min(max(_PROPORTIONAL * error_s + self.speed_integral, -_FASTEST), _FASTEST)
        self._begin_window()
