"""What a carrier follower delivers: the channel turned upright, and what it knows about the carrier at each hop."""

from __future__ import annotations

import enum
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import ComplexBlock, Floats


class Lock(enum.IntEnum):
    """How far the carrier's phase can be believed at one moment."""

    NONE = 0  # nothing is followed: the channel is turned by its nominal frequency
    HELD = 1  # the carrier is in the noise; its frequency is carried on from before
    LOCKED = 2  # the carrier is there and followed


class Follow(enum.Enum):
    """What to follow in a channel; all channels of one follower follow the same thing."""

    CARRIER = "carrier"
    PILOT = "pilot"
    SQUARE = "square"
    FOURTH_POWER = "fourth power"
    NOMINAL = "nominal"
    SPEECH = "speech"


@dataclass(frozen=True, slots=True)
class Track:
    """Readings at each hop; hop ``h`` covers samples ``[h * hop_samples, (h + 1) * hop_samples)`` of the turned stream.

    offset_hz : float64, (channels, hops): frequency followed, less the channel's nominal frequency.
    phase_cycles : float64, (channels, hops): the phase taken out, at the hop's middle, continuous (not wrapped).
    amplitude : float64, (channels, hops): the carrier's amplitude, full scale 1.0; 0 where no carrier is followed.
        Where a power of the signal is followed it is the root of that power's line, in amplitude units of the signal.
    noise_density : float64, (channels, hops): noise power per hertz about the carrier, full scale squared per hertz.
    lock : int8, (channels, hops): values of :class:`Lock`.
    """

    offset_hz: Floats
    phase_cycles: Floats
    amplitude: Floats
    noise_density: Floats
    lock: NDArray[np.int8]


@dataclass(frozen=True, slots=True)
class Turned:
    """A group of channels with each carrier on the positive real axis.

    iq : complex64, (channels, samples): the channel times the conjugate of the followed carrier's unit phasor; its
        magnitude is the channel's own. ``samples`` is ``hops * hop_samples``, but for the last piece of a flush.
    track : the follower's readings over the same samples.
    hop_samples : samples a hop.
    """

    iq: ComplexBlock
    track: Track
    hop_samples: int
