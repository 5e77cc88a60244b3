"""Which channels can work side by side: same rate, same thing to follow, same detectors."""

from __future__ import annotations

from dataclasses import dataclass

from rxchain.carrier.speech_verdict import RANGE_HZ
from rxchain.carrier.track import Follow
from rxchain.chain.channel_settings import AUTO, OFF, ChannelSettings
from rxchain.emissions import Reference
from rxchain.errors import SettingError
from rxchain.tuning.plan import BankPlan

# What a channel needs beyond its message's upper edge: the slope of its filters and some mistuning.
_MARGIN_HZ = 150.0
_ANY_MESSAGE_HZ = (300.0, 2700.0)  # for followers that do not look at it, so that their groups are not kept apart
_BLIND_TO_MESSAGE = (Follow.NOMINAL, Follow.CARRIER, Follow.SPEECH)
_FOLLOW = {
    Reference.CARRIER: Follow.CARRIER,
    Reference.PILOT: Follow.PILOT,
    Reference.PILOT_OR_NOMINAL: Follow.PILOT,
    Reference.PILOT_OR_FOURTH_POWER: Follow.PILOT,
    Reference.SQUARE: Follow.SQUARE,
    Reference.NOMINAL: Follow.NOMINAL,
}


@dataclass(frozen=True, slots=True)
class GroupKind:
    """What all channels of a group share.

    bins : width of their channels in the bank. candidates : detectors that run, the first where there is no choice.
    tolerance_hz : how far off the carrier may be, where a spacing says so.
    message_hz : band that the follower keeps apart from the carrier; only where it makes a difference to it.
    """

    bins: int
    follow: Follow
    pilot_is_optional: bool
    fourth_power: bool
    live: bool
    message_hz: tuple[float, float]
    stereo: bool
    n_messages: int
    candidates: tuple[str, ...]
    logged: bool = False
    notched: bool = False
    tolerance_hz: float | None = None

    @property
    def envelope_only(self) -> bool:
        """Whether no detector needs the carrier."""
        return all(name in ("envelope", "rectifier") for name in self.candidates)


def kind_of(channel: ChannelSettings, plan: BankPlan) -> GroupKind:
    """The kind of group that a channel belongs in."""
    emission = channel.emission
    follow = Follow.SPEECH if channel.aligns_by_speech else _FOLLOW[emission.reference]
    return GroupKind(
        bins=_bins(channel, plan),
        follow=follow,
        pilot_is_optional=emission.reference in (Reference.PILOT_OR_NOMINAL, Reference.PILOT_OR_FOURTH_POWER),
        fourth_power=emission.reference is Reference.PILOT_OR_FOURTH_POWER,
        live=channel.delay == "live",
        message_hz=_ANY_MESSAGE_HZ if follow in _BLIND_TO_MESSAGE else _followed_band(channel),
        stereo=emission.family == "AM-STEREO",
        n_messages=len(emission.messages),
        candidates=candidates_of(channel),
        logged=channel.log != OFF,
        notched=channel.notch_hz != OFF,
        tolerance_hz=channel.tolerance_hz,
    )


def _bins(channel: ChannelSettings, plan: BankPlan) -> int:
    bins = plan.narrowest(half_width_hz(channel))
    if bins is None:
        low_hz, high_hz = channel.audio_hz
        widest_hz = plan.usable_hz(plan.widths[-1]) - (half_width_hz(channel) - high_hz)
        raise SettingError(
            "audio",
            f"{low_hz:g}-{high_hz:g}Hz",
            f"the upper edge must be at most {widest_hz:.0f} Hz in a capture of this rate",
            f"give channel {channel.name} a lower one",
        )
    return bins


def half_width_hz(channel: ChannelSettings) -> float:
    """How far from its middle a channel must reach."""
    high_hz = channel.audio_hz[1]
    if channel.emission.family == "A1A":
        return max(abs(edge_hz - channel.beat_hz) for edge_hz in channel.audio_hz) + 2 * _MARGIN_HZ
    if channel.emission.family == "AM-STEREO":
        return 2.0 * high_hz  # amplitude and phase modulation together: the law spreads beyond the message's band
    return high_hz + largest_shift_hz(channel) + _MARGIN_HZ


def largest_shift_hz(channel: ChannelSettings) -> float:
    """How far a channel may be turned from its nominal frequency on purpose, or to a station that is far off."""
    if channel.tolerance_hz is not None:
        return channel.tolerance_hz
    if channel.emission.family == "A1A":
        return channel.beat_hz
    return RANGE_HZ if channel.aligns_by_speech else abs(channel.align_hz)


def candidates_of(channel: ChannelSettings) -> tuple[str, ...]:
    """The detectors to run: the one asked for, or those between which the picker decides."""
    sides = ("upper", "lower") if channel.sideband == "better" else ()
    if channel.sideband == "weighted":
        return ("weighted",)
    if channel.detector != AUTO:
        return (channel.detector, *sides)
    if channel.sideband in ("upper", "lower"):
        return ("coherent",)
    automatic = tuple(name for name in ("coherent", "envelope") if name in channel.emission.detectors)
    return (*automatic, *sides)


def _followed_band(channel: ChannelSettings) -> tuple[float, float]:
    """The part of the message that a follower must reckon with; for a vestigial emission the mirrored part alone."""
    if channel.emission.is_vestigial:
        return channel.audio_hz[0], channel.vestige_hz
    return channel.audio_hz


def grouped(
    channels: tuple[ChannelSettings, ...], plan: BankPlan
) -> dict[GroupKind, list[tuple[int, ChannelSettings]]]:
    """The channels with their places in the list, under the kinds of their groups, in order of first appearance."""
    groups: dict[GroupKind, list[tuple[int, ChannelSettings]]] = {}
    for place, channel in enumerate(channels):
        groups.setdefault(kind_of(channel, plan), []).append((place, channel))
    return groups
