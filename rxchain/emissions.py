"""The emissions the receiver knows: what each carries, and what its detectors can hold on to.

First symbols follow the ITU Radio Regulations, Appendix 1 (A double sideband, B independent sidebands, C vestigial,
H single sideband full carrier, J suppressed carrier, R reduced carrier). A suffix names the sideband that carries the
message, or for a vestigial emission the one sent whole.
"""

from __future__ import annotations

import enum
from dataclasses import dataclass

from rxchain.errors import SettingError


class Side(enum.IntEnum):
    """A sideband; the value is the sign of its frequencies about the carrier."""

    UPPER = 1
    LOWER = -1

    @property
    def label(self) -> str:
        """The trade's word: ``upper`` or ``lower``."""
        return self.name.lower()


class Reference(enum.Enum):
    """What a coherent detector can take frequency and phase from."""

    CARRIER = "carrier"  # a carrier as strong as the sidebands or stronger
    PILOT = "pilot"  # a carrier well under the sidebands
    PILOT_OR_NOMINAL = "pilot or nominal"  # a pilot where one is sent, else the nominal frequency
    PILOT_OR_FOURTH_POWER = "pilot or fourth power"  # a pilot where one is sent, else the line of the fourth power
    SQUARE = "square"  # no carrier, but sidebands that mirror each other: the line of the squared signal
    NOMINAL = "nominal"  # nothing to follow: the nominal frequency


@dataclass(frozen=True, slots=True)
class Emission:
    """One row of the table of emissions.

    messages : names of the messages, as the audio's channels are labelled.
    detectors : detectors that can serve, best known first.
    audio_hz : default band of the message. The bands of one emission may be set per channel.
    """

    name: str
    family: str
    side: Side | None
    messages: tuple[str, ...]
    detectors: tuple[str, ...]
    reference: Reference
    audio_hz: tuple[float, float]

    @property
    def is_double_sideband(self) -> bool:
        """Whether both sidebands carry the same message whole."""
        return self.family in ("A3E", "DSB-SC")

    @property
    def is_single_sideband(self) -> bool:
        """Whether one sideband alone carries the one message."""
        return self.family in ("J3E", "R3E", "H3E")

    @property
    def is_vestigial(self) -> bool:
        """Whether one sideband is sent whole and a vestige of the other beside it."""
        return self.family in ("C3E", "VSB-SC")

    @property
    def has_depth(self) -> bool:
        """Whether a depth of modulation is defined: a full carrier whose envelope carries the message."""
        return self.family in ("A3E", "H3E", "C3E", "AM-STEREO")


_ENVELOPE = ("envelope", "rectifier", "coherent")


def _sided(
    family: str, detectors: tuple[str, ...], reference: Reference, audio_hz: tuple[float, float]
) -> list[Emission]:
    suffixes = {Side.UPPER: "USB", Side.LOWER: "LSB"}
    return [
        Emission(f"{family}-{suffix}", family, side, (side.label,), detectors, reference, audio_hz)
        for side, suffix in suffixes.items()
    ]


_SPEECH_HZ = (300.0, 2700.0)
_PROGRAMME_HZ = (100.0, 4500.0)

EMISSIONS: dict[str, Emission] = {
    emission.name: emission
    for emission in [
        Emission("A3E", "A3E", None, ("both",), _ENVELOPE, Reference.CARRIER, _PROGRAMME_HZ),
        Emission("DSB-SC", "DSB-SC", None, ("both",), ("coherent",), Reference.SQUARE, _PROGRAMME_HZ),
        *_sided("J3E", ("coherent",), Reference.NOMINAL, _SPEECH_HZ),
        *_sided("R3E", ("coherent",), Reference.PILOT, _SPEECH_HZ),
        *_sided("H3E", ("envelope", "coherent"), Reference.CARRIER, _SPEECH_HZ),
        Emission("B8E", "B8E", None, ("upper", "lower"), ("coherent",), Reference.PILOT_OR_NOMINAL, _SPEECH_HZ),
        *_sided("C3E", ("envelope", "coherent"), Reference.CARRIER, _PROGRAMME_HZ),
        *_sided("VSB-SC", ("coherent",), Reference.SQUARE, _PROGRAMME_HZ),
        Emission(
            "QAM",
            "QAM",
            None,
            ("in-phase", "quadrature"),
            ("coherent",),
            Reference.PILOT_OR_FOURTH_POWER,
            _PROGRAMME_HZ,
        ),
        Emission("AM-STEREO", "AM-STEREO", None, ("left", "right"), ("coherent",), Reference.CARRIER, _PROGRAMME_HZ),
        Emission("A1A", "A1A", None, ("beat",), ("coherent",), Reference.NOMINAL, (450.0, 950.0)),
    ]
}


def emission_named(name: str) -> Emission:
    """The emission of that name; a :class:`SettingError` lists the known ones.

    >>> emission_named("J3E-LSB").side.label
    'lower'
    """
    try:
        return EMISSIONS[name.upper()]
    except KeyError:
        raise SettingError(
            "emission", name, "not an emission known here", "auto, or one of " + ", ".join(EMISSIONS)
        ) from None
