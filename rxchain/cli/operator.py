"""Carries out the dashboard's wishes on the receiver, the sound and the logbook of a run."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rxchain.chain import alterations
from rxchain.chain.channel_settings import ChannelSettings
from rxchain.chain.commands import Commands
from rxchain.chain.receiver import Receiver
from rxchain.units import format_frequency

if TYPE_CHECKING:
    from rxchain.logbook.station_log import StationLog
    from rxchain.sinks.listening import Listening

_NO_SOUND = "nothing is listened to: start with --listen"
_NO_LOG = "no logbook: give a channel log=transmissions"


class Operator:
    """See :class:`rxchain.dashboard.operations.Operations`; what touches the receiver waits for its own thread."""

    def __init__(
        self, commands: Commands, receiver: Receiver, listening: Listening | None, log: StationLog | None
    ) -> None:
        self._commands, self._receiver, self._listening, self._log = commands, receiver, listening, log

    @property
    def said(self) -> str:
        """The answer to the latest wish."""
        return self._commands.said

    def tune(self, place: int, by_hz: float) -> None:
        """Retunes a channel."""

        def action() -> str:
            channel = self._change(place, alterations.retuned(self._wanted(place), by_hz))
            return f"{channel.name}: {format_frequency(channel.frequency_hz)}"

        self._commands.post(action)

    def alter(self, place: int, what: str) -> None:
        """Takes the next of what the channel can be."""

        def action() -> str:
            now = self._wanted(place)
            match what:
                case "emission":
                    changed = alterations.next_emission(now)
                case "emission back":
                    changed = alterations.next_emission(now, -1)
                case "detector":
                    changed = alterations.next_detector(now)
                case "sideband":
                    changed = alterations.next_sideband(now)
                case "band":
                    changed = alterations.next_band(now)
                case "squelch":
                    changed = alterations.next_squelch(now)
                case _:
                    changed = alterations.next_notch(now)
            if changed == now:
                return f"{now.name}: {now.emission.name} has no other {what.split()[0]}"
            channel = self._change(place, changed)
            return f"{channel.name}: {alterations.in_words(channel)}"

        self._commands.post(action)

    def hear(self, place: int) -> None:
        """Plays this channel alone."""
        from rxchain.sinks.hearing import Hearing

        if self._listening is None:
            self._commands.said = _NO_SOUND
        else:
            self._listening.hear(Hearing.solo(place))
            self._commands.said = f"heard: {self._receiver.channels[place].name}"

    def mute(self) -> None:
        """Silences the sound output, or lets it be heard again."""
        if self._listening is None:
            self._commands.said = _NO_SOUND
        else:
            muted = not self._listening.status().muted
            self._listening.set_muted(muted)
            self._commands.said = "muted" if muted else "no longer muted"

    def louder(self, by_db: float) -> None:
        """Changes the volume."""
        if self._listening is None:
            self._commands.said = _NO_SOUND
        else:
            self._listening.set_volume_db(self._listening.status().volume_db + by_db)
            self._commands.said = f"volume {self._listening.status().volume_db:+.0f} dB"

    def word(self, place: int, text: str) -> None:
        """Enters a word into the logbook, about a channel and this moment."""

        def action() -> str:
            if self._log is None:
                return _NO_LOG
            self._log.word(text, place)
            return f"entered: {text}"

        self._commands.post(action)

    def _wanted(self, place: int) -> ChannelSettings:
        return self._receiver.wanted(place)

    def _change(self, place: int, channel: ChannelSettings) -> ChannelSettings:
        self._receiver.change(place, channel)
        return channel
