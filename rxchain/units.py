"""Quantities as people write them, read and written at the program's edge.

Inside, a quantity's name ends in its unit and its value is a plain number in that unit.
"""

from __future__ import annotations

import math
import re

from rxchain.errors import SettingError

_FREQUENCY_UNITS = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
_FREQUENCY = re.compile(r"^\s*([+-]?\d+(?:\.\d*)?(?:[eE][+-]?\d+)?)\s*([kKmMgG]?[hH][zZ])\s*$")
_BAND = re.compile(r"^\s*(\d+(?:\.\d*)?)\s*(?:-|\.\.)\s*(\d+(?:\.\d*)?)\s*([kKmMgG]?[hH][zZ])\s*$")


def parse_frequency_hz(text: str, name: str = "frequency") -> float:
    """Hertz from a number with its unit: Hz, kHz, MHz or GHz, in any case of letters.

    >>> parse_frequency_hz("7.1MHz")
    7100000.0
    >>> parse_frequency_hz("-35 Hz")
    -35.0
    """
    match = _FREQUENCY.match(text)
    if not match:
        raise SettingError(name, text, "a frequency is a number with its unit", "write it like 7.1MHz or 300Hz")
    value_hz = float(match[1]) * _FREQUENCY_UNITS[match[2].lower()]
    if not math.isfinite(value_hz):
        raise SettingError(name, text, "a frequency is a finite number", "write it like 7.1MHz or 300Hz")
    # Decimal fractions of a megahertz are not binary ones: 7.1e6 has to be exactly 7100000.
    return round(value_hz, 6)


def parse_band_hz(text: str, name: str = "audio") -> tuple[float, float]:
    """Lower and upper edge, hertz, of a band written ``LOW-HIGHHz``.

    >>> parse_band_hz("300-2700Hz")
    (300.0, 2700.0)
    >>> parse_band_hz("0.3-2.7kHz")
    (300.0, 2700.0)
    """
    match = _BAND.match(text)
    if not match:
        raise SettingError(name, text, "a band is LOW-HIGH with one unit", "write it like 300-2700Hz")
    scale = _FREQUENCY_UNITS[match[3].lower()]
    low_hz, high_hz = round(float(match[1]) * scale, 6), round(float(match[2]) * scale, 6)
    if not low_hz < high_hz:
        raise SettingError(name, text, "the lower edge must lie under the upper", "write it like 300-2700Hz")
    return low_hz, high_hz


def format_frequency(frequency_hz: float) -> str:
    """The shortest exact way to write a frequency with its unit.

    >>> format_frequency(7100000.0), format_frequency(77500.0), format_frequency(118.1e6), format_frequency(50.0)
    ('7.1MHz', '77.5kHz', '118.1MHz', '50Hz')
    """
    for unit, scale in (("GHz", 1e9), ("MHz", 1e6), ("kHz", 1e3)):
        if abs(frequency_hz) >= scale:
            return f"{frequency_hz / scale:.9f}".rstrip("0").rstrip(".") + unit
    return f"{frequency_hz:.6f}".rstrip("0").rstrip(".") + "Hz"


def db_from_power(ratio: float) -> float:
    """Decibels of a power ratio; minus infinity for zero.

    >>> round(db_from_power(2.0), 4)
    3.0103
    """
    return 10.0 * math.log10(ratio) if ratio > 0 else -math.inf


def power_from_db(level_db: float) -> float:
    """Power ratio of a level in decibels.

    >>> power_from_db(20.0)
    100.0
    """
    return math.pow(10.0, level_db / 10.0)


def amplitude_from_db(level_db: float) -> float:
    """Amplitude ratio of a level in decibels.

    >>> amplitude_from_db(20.0)
    10.0
    """
    return math.pow(10.0, level_db / 20.0)


_BYTES = {"": 1, "k": 10**3, "M": 10**6, "G": 10**9, "T": 10**12}
_SIZE = re.compile(r"(\d+(?:\.\d+)?)\s*([kMGT]?)B?")


def parse_bytes(text: str, name: str = "size") -> int:
    """An amount of storage in bytes; kB, MB, GB and TB are powers of ten.

    >>> parse_bytes("1.5GB")
    1500000000
    """
    match = _SIZE.fullmatch(text.strip())
    if not match:
        raise SettingError(name, text, "must be an amount of storage", "write it like 20GB")
    return round(float(match[1]) * _BYTES[match[2]])
