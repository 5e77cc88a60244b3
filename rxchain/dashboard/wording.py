"""Figures and states in words, with as many digits as they deserve."""

from __future__ import annotations

import math

from rxchain.streams import Reading
from rxchain.units import format_frequency

NOTHING = "–"
LOCK_WORDS = {"locked": "locked", "held": "held", "none": "no lock", "nominal": "by dial"}
SHORT_LOCK_WORDS = {"locked": "lock", "held": "held", "none": "none", "nominal": "dial"}


def with_uncertainty(reading: Reading | None, unit: str) -> str:
    """A figure and its uncertainty to one or two digits of the latter.

    >>> with_uncertainty(Reading(19.8372, 0.412), "dB")
    '19.8 ± 0.4 dB'
    >>> with_uncertainty(None, "dB")
    '–'
    """
    if reading is None or not math.isfinite(reading.value):
        return NOTHING
    digits = _digits(reading.uncertainty)
    return f"{reading.value:.{digits}f} ± {reading.uncertainty:.{digits}f} {unit}"


def short(reading: Reading | None, digits: int = 0, sign: bool = False) -> str:
    """The figure alone.

    >>> short(Reading(-3.12, 0.05), 1, sign=True), short(None)
    ('-3.1', '–')
    """
    if reading is None or not math.isfinite(reading.value):
        return NOTHING
    return f"{reading.value:{'+' if sign else ''}.{digits}f}"


def duration(seconds: float) -> str:
    """A stretch of time as a clock shows it.

    >>> duration(75.2), duration(3725.0)
    ('1:15', '1:02:05')
    """
    whole = int(seconds)
    hours, minutes, rest = whole // 3600, whole // 60 % 60, whole % 60
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def clean(text: str) -> str:
    r"""Text from outside, fit for a screen: no control characters.

    >>> clean("a\x1b[2Jb")
    'a?[2Jb'
    """
    return "".join(character if character.isprintable() else "?" for character in text)


def frequency(frequency_hz: float) -> str:
    """A frequency with its unit set apart.

    >>> frequency(7.1e6)
    '7.1 MHz'
    """
    text = format_frequency(frequency_hz)
    number = text.rstrip("GMkHz")
    return f"{number} {text[len(number) :]}"


def _digits(uncertainty: float) -> int:
    if not math.isfinite(uncertainty) or uncertainty <= 0:
        return 2
    return min(6, max(0, -math.floor(math.log10(uncertainty))))
