"""What each key means: the dashboard's state between two pictures, and the wishes it passes on."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from rxchain.dashboard.operations import STEPS_HZ, NoOperations, Operations

UP, DOWN, RIGHT, LEFT, PAGE_UP, PAGE_DOWN = "\x1b[A", "\x1b[B", "\x1b[C", "\x1b[D", "\x1b[5~", "\x1b[6~"  # ECMA-48
_MOVES = {UP: -1, DOWN: 1, PAGE_UP: -10, PAGE_DOWN: 10}
_ALTERS = {
    "e": "emission",
    "E": "emission back",
    "d": "detector",
    "s": "sideband",
    "b": "band",
    "o": "squelch",
    "n": "notch",
}
_ENTER, _ESCAPE, _ERASE = ("\r", "\n"), "\x1b", ("\x7f", "\b")
_VOLUME_STEP_DB = 2.0
_LONGEST_WORD = 120

HELP = (
    ("up, down, page up, page down", "choose a channel"),
    ("left, right", "tune it down or up by the step"),
    ("t", f"next step: {', '.join(f'{hz:g}' for hz in STEPS_HZ)} Hz"),
    ("e, E", "next or previous emission"),
    ("d  s  b", "next detector, sideband, audio band"),
    ("o  n", "next squelch, notch on or off"),
    ("h  m  + -", "hear this channel alone, mute, volume"),
    ("w", "write a word into the logbook"),
    ("f", "freeze the picture"),
    ("q", "stop"),
)


@dataclass(slots=True)
class Keyboard:
    """The state that keys change. selected : place of the chosen channel. typed : the word being written, None where none
    is. is_frozen, shows_help : of the picture. step_hz : of tuning. follows : whether the sound follows the choice.
    """

    operations: Operations = field(default_factory=NoOperations)
    selected: int = 0
    typed: str | None = None
    is_frozen: bool = False
    shows_help: bool = False
    step_hz: float = 10.0
    follows: bool = False

    def obey(self, keys: str, stop: Callable[[], None], n_channels: int) -> None:
        """Carries out the keys pressed; several may have come at once."""
        for key in split_keys(keys):
            if self.typed is not None:
                self._write(key)
            elif self.shows_help:
                self.shows_help = False
            else:
                self._obey_one(key, stop, n_channels)

    def _obey_one(self, key: str, stop: Callable[[], None], n_channels: int) -> None:
        if key in _MOVES:
            self.selected = min(max(self.selected + _MOVES[key], 0), max(0, n_channels - 1))
            if self.follows:
                self.operations.hear(self.selected)
        elif key in (LEFT, RIGHT):
            self.operations.tune(self.selected, self.step_hz if key == RIGHT else -self.step_hz)
        elif key in _ALTERS:
            self.operations.alter(self.selected, _ALTERS[key])
        elif key == "t":
            self.step_hz = STEPS_HZ[(STEPS_HZ.index(self.step_hz) + 1) % len(STEPS_HZ)]
        elif key == "h":
            self.follows = True
            self.operations.hear(self.selected)
        elif key == "m":
            self.operations.mute()
        elif key in ("+", "-"):
            self.operations.louder(_VOLUME_STEP_DB if key == "+" else -_VOLUME_STEP_DB)
        elif key == "w":
            self.typed = ""
        elif key == "f":
            self.is_frozen = not self.is_frozen
        elif key == "?":
            self.shows_help = True
        elif key in ("q", "Q"):
            stop()

    def _write(self, key: str) -> None:
        text = self.typed or ""
        if key in _ENTER:
            if text.strip():
                self.operations.word(self.selected, text.strip())
            self.typed = None
        elif key == _ESCAPE:
            self.typed = None
        elif key in _ERASE:
            self.typed = text[:-1]
        elif len(key) == 1 and key.isprintable() and len(text) < _LONGEST_WORD:
            self.typed = text + key


def split_keys(text: str) -> list[str]:
    r"""Single keys out of what a terminal sent at once.

    >>> split_keys("a\x1b[A\x1b[5~q")
    ['a', '\x1b[A', '\x1b[5~', 'q']
    """
    keys: list[str] = []
    k = 0
    while k < len(text):
        end = k + 1
        if text.startswith("\x1b[", k):
            end = k + 2
            while end < len(text) and not ("@" <= text[end] <= "~"):
                end += 1
            end += 1
        keys.append(text[k:end])
        k = end
    return keys
