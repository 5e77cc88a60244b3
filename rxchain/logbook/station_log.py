"""A receiver's logbook while it runs: transmissions become clips and entries, and whatever happens is entered."""

from __future__ import annotations

import datetime as dt
import errno
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from rxchain import __version__
from rxchain.chain.receiver import ChannelTap, Receiver
from rxchain.logbook.channel_log import ChannelLog, Open
from rxchain.logbook.clips import Clip, finish_clip, growing_paths
from rxchain.logbook.on_air import on_air
from rxchain.logbook.pruning import prune, remove_files
from rxchain.logbook.store import LogStore, read_entries
from rxchain.logbook.transmissions import Span
from rxchain.meters.figures import Figures

_WRITE_EVERY_S = 0.5  # of the clock on the wall: what a power cut costs
_RETRY_S = 10.0
_MAKE_ROOM_EVERY_S = 900.0
_HOUR_S = 3_600.0
_FADE_DB = 10.0  # below the median level of a transmission
_MOST_WAITING = 10_000  # entries that wait for a full disk to have room again


class StationLog:
    """Logs the channels of a receiver whose ``log`` key asks for it.

    clock : seconds, steadily rising. now : UTC; for entries about the run itself, and for what has no time of its own.
    budget_bytes, keep_days : what is removed to make room, at the start and every quarter of an hour; None: nothing.
    Raises :class:`~rxchain.errors.RequestError` where the folder cannot be used.
    """

    def __init__(
        self,
        folder: Path,
        receiver: Receiver,
        clock: Callable[[], float],
        now: Callable[[], dt.datetime],
        budget_bytes: int | None = None,
        keep_days: float | None = None,
    ) -> None:
        self.folder = folder
        self._receiver, self._clock, self._now = receiver, clock, now
        self._store = LogStore(folder)
        self._channels: dict[int, ChannelLog] = {}
        self._waiting: list[tuple[str, dict[str, Any], str | None]] = []
        self._written = self._retry_at = self._pruned = clock()
        self._budget_bytes, self._keep_days = budget_bytes, keep_days
        self._gaps_entered = 0
        self._is_full = False
        self._run = f"{self._store.number + 1:08d}"
        self._clips = 0
        self.transmissions = 0
        recovered = _recover(self._store)
        self._enter(
            "run",
            {
                "event": "started",
                "time": _text(now()),
                "rxchain": __version__,
                "source": receiver.info.name,
                "centre_hz": receiver.info.centre_hz,
                "sample_rate_hz": receiver.info.sample_rate_hz,
                "stream_start": _text(receiver.info.start),
                "clips_closed_after_a_break": recovered,
            },
        )
        self._make_room()

    def _make_room(self) -> None:
        """Removes what is beyond the budget or the age."""
        self._pruned = self._clock()
        if self._budget_bytes is None and self._keep_days is None:
            return
        try:
            prune(self._store, self._now(), self._budget_bytes, self._keep_days)
        except OSError as error:
            self._disk_trouble(error)

    def after_block(self) -> None:
        """To be called after each block, in the numeric thread: takes what was received since the last time."""
        for tap in self._receiver.take_taps():
            self._take(tap)
        self._enter_gaps()
        if self._clock() - self._written >= _WRITE_EVERY_S:
            self._write_all()
        if self._clock() - self._pruned >= _MAKE_ROOM_EVERY_S:
            self._make_room()
        self._finish_complete(at_end=False)

    def word(self, text: str, place: int | None = None) -> None:
        """Enters a word from the operator, about a channel or the whole run."""
        body: dict[str, Any] = {"time": _text(self._now()), "stream_s": self._receiver.elapsed_s, "text": text}
        if place is not None:
            body["channel"] = self._receiver.channels[place].name
        self._enter("mark", body)

    def close(self, reason: str = "ended") -> None:
        """Ends what is on and lets go of the logbook; the last entry says why."""
        self.after_block()
        for channel in self._channels.values():
            channel.cutter.stop()
            if channel.keeps_all:
                for one in channel.open:
                    one.span.end_s = one.span.keep_to_s = channel.audio.seconds
        self._finish_complete(at_end=True)
        self._enter("run", {"event": reason, "time": _text(self._now()), "stream_s": self._receiver.elapsed_s})
        self._store.close()

    def _take(self, tap: ChannelTap) -> None:
        channel = self._channels.get(tap.place)
        if channel is None or channel.group is not tap.group:
            if channel is not None:  # received in another way from here on: what was on ends
                channel.cutter.stop()
                self._finish_complete(at_end=True, only=tap.place)
            keeps_all = self._receiver.channels[tap.place].log == "all"
            channel = self._channels[tap.place] = ChannelLog(tap.group, tap.row, keeps_all)
        for span in channel.take(tap.iq, tap.steps, tap.audio):
            self._begin(tap.place, channel, span)
        if channel.keeps_all:
            self._by_hours(tap.place, channel)

    def _by_hours(self, place: int, channel: ChannelLog) -> None:
        """Continuous audio, a file for each hour of the clock."""
        start = self._receiver.info.start
        since_hour_s = (
            0.0 if start is None else (start - start.replace(minute=0, second=0, microsecond=0)).total_seconds()
        )
        while True:
            current = next((one for one in channel.open if not one.span.is_over), None)
            if current is None:
                begin_s = channel.open[-1].span.end_s if channel.open else 0.0
                self._begin(place, channel, Span(begin_s, begin_s))
                continue
            into_s = channel.first_s + current.span.begin_s + since_hour_s
            until_s = current.span.begin_s + _HOUR_S - into_s % _HOUR_S
            if channel.audio.seconds < until_s:
                return
            current.span.end_s = current.span.keep_to_s = until_s

    def _begin(self, place: int, channel: ChannelLog, span: Span) -> None:
        settings = self._receiver.channels[place]
        self._clips += 1
        key = f"{settings.name}-{self._run}-{self._clips:06d}"
        start = self._time(channel.first_s + span.keep_from_s)
        about = {
            "name": settings.name,
            "day": (start or self._now()).strftime("%Y-%m-%d"),
            "frequency_hz": settings.frequency_hz,
            "emission": settings.emission.name,
            "audio_rate_hz": channel.group.audio_rate_hz,
            "iq_rate_hz": channel.group.rate_hz,
            "messages": channel.group.kind.n_messages,
            "start": _text(start),
            "stream_s": channel.first_s + span.begin_s,
        }
        audio_to, iq_to = (round(span.keep_from_s * reel.rate_hz) for reel in (channel.audio, channel.iq))
        one = Open(span, key, about, None, audio_to, iq_to)
        try:
            self._store.begin(key, about)
            one.clip = Clip(self.folder, key, channel.group.kind.n_messages)
        except OSError as error:
            self._disk_trouble(error)
        channel.open.append(one)

    def _write_all(self) -> None:
        self._written = self._clock()
        for channel in self._channels.values():
            for one in channel.open:
                self._write(channel, one)
            channel.forget()
        self._retry()

    def _write(self, channel: ChannelLog, one: Open) -> None:
        try:
            channel.write(one)
            if one.clip is not None:
                one.clip.sync()
        except OSError as error:
            if one.clip is not None:
                one.clip.close()
            one.clip = None
            one.about["cut"] = "disk full" if error.errno == errno.ENOSPC else str(error)
            self._disk_trouble(error)

    def _finish_complete(self, at_end: bool, only: int | None = None) -> None:
        """Closes what is complete, in the order in which it ended."""
        due = [
            (channel.first_s + one.span.end_s, place, channel, one)
            for place, channel in self._channels.items()
            if only is None or place == only
            for one in channel.open
            if channel.is_complete(one, at_end)
        ]
        for _, place, channel, one in sorted(due, key=lambda item: item[:2]):
            self._write(channel, one)
            channel.open.remove(one)
            self._finish(place, channel, one)

    def _finish(self, place: int, channel: ChannelLog, one: Open) -> None:
        span = one.span
        if one.clip is not None and not (span.is_worth_keeping or channel.keeps_all):
            one.clip.discard()
            self._enter_quietly_removed(one.key)
            return
        body = self._body(place, channel, one)
        try:
            if one.clip is not None:
                one.clip.close()
                for name, reel in (("audio_samples", channel.audio), ("iq_samples", channel.iq)):
                    first, last = (round(edge_s * reel.rate_hz) for edge_s in (span.keep_from_s, span.keep_to_s))
                    one.about[name] = last - first
                body["files"] = finish_clip(self.folder, one.key, one.about)
        except OSError as error:
            body["cut"] = "disk full" if error.errno == errno.ENOSPC else str(error)
            self._disk_trouble(error)
        self.transmissions += 1
        self._enter("transmission", body, one.key)

    def _enter_quietly_removed(self, key: str) -> None:
        """A squelch that opened for a moment leaves nothing."""
        try:
            self._store.finish(key)
        except OSError as error:
            self._disk_trouble(error)

    def _body(self, place: int, channel: ChannelLog, one: Open) -> dict[str, Any]:
        receiver, span, settings = self._receiver, one.span, self._receiver.channels[place]
        begin_s, end_s = (channel.first_s + edge_s for edge_s in self._edges(channel, one))
        emission, given, confidence = receiver.identified(place)
        detector, reason = channel.group.detector_at(channel.row, 0.5 * (span.begin_s + span.end_s))
        figures: Figures = channel.group.figures_between(span.begin_s, span.end_s)[channel.row]
        levels_db = channel.group.levels_db(span.begin_s, span.end_s)[channel.row]
        lost = [(first, seconds) for first, seconds in receiver.losses if first < end_s and first + seconds > begin_s]
        return {
            "channel": settings.name,
            "what": "hour" if channel.keeps_all else "transmission",
            "start": _text(self._time(begin_s)),
            "end": _text(self._time(end_s)),
            "stream_s": [round(begin_s, 3), round(end_s, 3)],
            "seconds": round(end_s - begin_s, 3),
            "frequency_hz": settings.frequency_hz,
            "emission": emission,
            "emission_given": given,
            "emission_confidence": confidence,
            "received_as": settings.emission.name,
            "audio_hz": list(channel.group.channels[channel.row].audio_hz),
            "detector": detector,
            "detector_reason": reason,
            "measured": figures.as_json(),
            "fades": _fades(levels_db),
            "samples_lost_s": sum(seconds for _, seconds in lost),
            "gaps": len(lost),
            "overloaded": sum(n for at, n in receiver.overloads if begin_s <= at <= end_s),
            "cut": one.about.get("cut") or ("still on" if span.is_cut else None),
            "files": [],
        }

    def _edges(self, channel: ChannelLog, one: Open) -> tuple[float, float]:
        """When the emission came on and went off, seconds of the group's stream."""
        span = one.span
        path = growing_paths(self.folder, one.key)[1]
        if channel.keeps_all or one.clip is None or not path.exists():
            return span.begin_s, span.end_s
        try:
            iq = np.fromfile(path, np.complex64)
        except OSError:
            return span.begin_s, span.end_s
        begin_s, end_s = on_air(iq, channel.iq.rate_hz, span.begin_s - span.keep_from_s, span.end_s - span.keep_from_s)
        return span.keep_from_s + begin_s, span.keep_from_s + end_s

    def _enter_gaps(self) -> None:
        for first_s, seconds in list(self._receiver.losses)[self._gaps_entered :]:
            body = {
                "event": "samples lost",
                "time": _text(self._time(first_s)),
                "stream_s": first_s,
                "seconds": seconds,
            }
            self._enter("event", body)
            self._gaps_entered += 1

    def _enter(self, kind: str, body: dict[str, Any], finished: str | None = None) -> None:
        """Adds an entry, or has it wait where the disk is full: entries are never dropped while the run lasts."""
        self._waiting.append((kind, body, finished))
        del self._waiting[:-_MOST_WAITING]
        self._retry()

    def _retry(self) -> None:
        if self._is_full and self._clock() < self._retry_at:
            return
        try:
            if self._is_full:
                self._store.append("event", {"event": "writing again", "time": _text(self._now())})
                self._is_full = False
            while self._waiting:
                self._store.append(*self._waiting[0])
                self._waiting.pop(0)
        except OSError as error:
            self._disk_trouble(error)

    def _disk_trouble(self, error: OSError) -> None:
        self._retry_at = self._clock() + _RETRY_S
        if self._is_full:
            return
        self._is_full = True
        self._waiting.append(("event", {"event": "not writable", "time": _text(self._now()), "says": str(error)}, None))

    def _time(self, stream_s: float) -> dt.datetime | None:
        start = self._receiver.info.start
        return None if start is None else start + dt.timedelta(seconds=stream_s)


def _recover(store: LogStore) -> int:
    """Closes the clips that an earlier run left growing, and enters them as cut short; returns how many."""
    left = store.unfinished()
    for key, about in left:
        try:
            files = finish_clip(store.folder, key, about)
        except (OSError, RuntimeError, ValueError, KeyError) as error:
            files, about = [], about | {"says": str(error)}
        seconds = max((float(file["seconds"]) for file in files), default=0.0)
        body = {
            "channel": about.get("name"),
            "what": "transmission",
            "start": about.get("start"),
            "end": None,
            "seconds": round(seconds, 3),
            "frequency_hz": about.get("frequency_hz"),
            "emission": about.get("emission"),
            "cut": "the run broke off",
            "files": files,
        }
        store.append("transmission", body, key)
    # A break between the entry of a removal and the removal itself leaves files that are gone by the book.
    for entry in read_entries(store.folder, "removal"):
        remove_files(store.folder, [str(path) for path in entry.body.get("paths", [])])
    for path in (path for key, _ in left for path in growing_paths(store.folder, key)):
        path.unlink(missing_ok=True)
    return len(left)


def _fades(levels_db: np.ndarray) -> int:
    """How often the level fell 10 dB under its median."""
    if len(levels_db) < 3:
        return 0
    low = levels_db < np.median(levels_db) - _FADE_DB
    return int(np.count_nonzero(low[1:] & ~low[:-1]))


def _text(time: dt.datetime | None) -> str | None:
    """UTC to the millisecond."""
    if time is None:
        return None
    return time.astimezone(dt.UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
