"""The options of listening, and the speaker that follows from them."""

from __future__ import annotations

import argparse
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rxchain.chain.channel_settings import ChannelSettings
    from rxchain.chain.receiver import Receiver
    from rxchain.sinks.listening import Listening

_LOWEST_DB = -80.0


@dataclass(frozen=True, slots=True)
class Listen:
    """What to hear: names as ``--listen`` takes them, "" for the first channel; on which output, how loud."""

    heard: str
    output: str | None
    volume_db: float | None


def add_listen_arguments(parser: argparse.ArgumentParser) -> None:
    """The arguments of listening."""
    parser.add_argument(
        "--listen",
        nargs="?",
        const="",
        metavar="NAME",
        help="plays a channel: NAME, NAME+NAME (a mix), NAME/NAME (left ear, right ear); the first if no name is given",
    )
    parser.add_argument(
        "--output", metavar="DEVICE", help="sound output: number or (part of) name; see rxchain devices"
    )
    parser.add_argument("--volume", metavar="DB", help="volume in dB, 0 at most; -20 if left out")


def listen_of(arguments: argparse.Namespace) -> Listen | None:
    """What the arguments ask to hear, None where nothing."""
    from rxchain.errors import SettingError

    if arguments.listen is None:
        for key in ("output", "volume"):
            value = getattr(arguments, key)
            if value is not None:
                raise SettingError(key, value, "is for listening", "add --listen")
        return None
    if arguments.pace == "fast":
        raise SettingError("pace", "fast", "what is listened to goes at its own pace", "leave out one of the two")
    return Listen(arguments.listen, arguments.output, _volume_db(arguments.volume))


def live_where_heard(channels: tuple[ChannelSettings, ...], listen: Listen | None) -> tuple[ChannelSettings, ...]:
    """The channels with every delay decided: short where it is heard, which is any channel if none was named."""
    from rxchain.sinks.hearing import hearing_of

    heard: tuple[int, ...] = ()
    if listen is not None:
        names = [channel.name for channel in channels]
        heard = hearing_of(listen.heard, names).places if listen.heard else tuple(range(len(channels)))
    return tuple(
        replace(channel, delay="live" if place in heard else "full") if channel.delay == "auto" else channel
        for place, channel in enumerate(channels)
    )


def open_listening(listen: Listen, receiver: Receiver) -> Listening:
    """The speaker, playing; raises :class:`~rxchain.errors.RequestError` where there is none to be had."""
    import time

    from rxchain.errors import RequestError, SinkError
    from rxchain.sinks.hearing import Hearing, hearing_of
    from rxchain.sinks.listening import Listening
    from rxchain.sinks.playback import START_VOLUME_DB
    from rxchain.sinks.sound_output import SoundOutput, find_output, look_again

    names = [channel.name for channel in receiver.channels]
    hearing = hearing_of(listen.heard, names) if listen.heard else Hearing.solo(0)
    opened = False

    def reopen() -> SoundOutput:
        nonlocal opened
        if opened:
            look_again()
        output = SoundOutput(find_output(listen.output))
        opened = True
        return output

    volume_db = START_VOLUME_DB if listen.volume_db is None else listen.volume_db
    try:
        return Listening(receiver, hearing, reopen, time.monotonic, volume_db)
    except SinkError as error:
        raise RequestError(str(error)) from error


def _volume_db(text: str | None) -> float | None:
    from rxchain.errors import SettingError

    if text is None:
        return None
    try:
        volume_db = float(text.removesuffix("dB"))
    except ValueError:
        raise SettingError("volume", text, "must be a number of dB") from None
    if not _LOWEST_DB <= volume_db <= 0.0:
        raise SettingError(
            "volume", text, f"must lie between {_LOWEST_DB:g} and 0 dB; 0 is as loud as the limiter lets"
        )
    return volume_db
