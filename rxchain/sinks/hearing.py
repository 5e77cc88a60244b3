"""What is heard: which channels, and in which ear."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Self

import numpy as np

from rxchain.errors import SettingError
from rxchain.streams import Floats


@dataclass(frozen=True, slots=True)
class Hearing:
    """Places of the channels heard in the left ear and in the right; the same in both is the usual case."""

    left: tuple[int, ...] = ()
    right: tuple[int, ...] = ()

    @classmethod
    def solo(cls, place: int) -> Self:
        """One channel in both ears; where it has two messages, one in each."""
        return cls((place,), (place,))

    @classmethod
    def mix(cls, places: Sequence[int]) -> Self:
        """Several channels in both ears."""
        return cls(tuple(places), tuple(places))

    @property
    def places(self) -> tuple[int, ...]:
        """Every channel heard, each once."""
        return tuple(dict.fromkeys((*self.left, *self.right)))

    def gains(self, place: int, n_messages: int) -> Floats:
        """How much of each message of a channel goes to each ear: (2, messages).

        A mix keeps its power: each of n channels is lowered by the square root of n. A channel of two messages that is
        heard in both ears has one in each; in one ear it is their mean.
        """
        gains = np.zeros((2, n_messages))
        both = place in self.left and place in self.right
        for ear, places in enumerate((self.left, self.right)):
            if place in places:
                share = 1.0 / math.sqrt(len(places))
                if both and n_messages == 2:
                    gains[ear, ear] = share
                else:
                    gains[ear] = share / n_messages
        return gains

    def in_words(self, names: Sequence[str]) -> str:
        """As :func:`hearing_of` reads it.

        >>> Hearing((0, 2), (1,)).in_words(["net", "ship", "beacon"])
        'net+beacon/ship'
        """
        left, right = ("+".join(names[place] for place in places) for places in (self.left, self.right))
        return left if left == right else f"{left}/{right}"


def hearing_of(text: str, names: Sequence[str]) -> Hearing:
    """What ``NAME``, ``NAME+NAME`` (a mix) or ``NAME/NAME`` (left ear, right ear) asks for.

    >>> hearing_of("net/ship+beacon", ["net", "ship", "beacon"])
    Hearing(left=(0,), right=(1, 2))
    >>> hearing_of("a+b", ["a+b", "a"])
    Hearing(left=(0,), right=(0,))
    """
    ears = text.split("/")
    if len(ears) > 2:
        raise SettingError("listen", text, "there are two ears", "write it like NAME, NAME+NAME or NAME/NAME")
    left, right = (_places(ear, text, names) for ear in (ears[0], ears[-1]))
    return Hearing(left, right)


def _places(ear: str, text: str, names: Sequence[str]) -> tuple[int, ...]:
    wanted = [ear] if ear in names else ear.split("+")  # a name may have a '+' of its own
    for name in wanted:
        if name not in names:
            raise SettingError("listen", text, f"no channel is named {name!r}", "there are: " + ", ".join(names))
    return tuple(dict.fromkeys(names.index(name) for name in wanted))
