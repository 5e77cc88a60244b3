"""One reception from request to result: what ``receive`` and ``demo`` have in common."""

from __future__ import annotations

import datetime as dt
import os
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

# Small matrix products gain nothing from threads, and threads cost the numeric one its quiet.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from rxchain.chain.centre_choice import centre_beside, channels_on_spike
from rxchain.chain.channel_settings import OFF, ChannelSettings
from rxchain.chain.commands import Commands
from rxchain.chain.receiver import Receiver
from rxchain.chain.runner import Runner, span_text
from rxchain.chain.station import LogRules, check_names
from rxchain.cli.listen_options import Listen, live_where_heard, open_listening
from rxchain.cli.main import one_line
from rxchain.cli.operator import Operator
from rxchain.cli.source_options import parsed_options
from rxchain.dashboard.display import Display, make_display
from rxchain.errors import FaultError, SettingError
from rxchain.sinks.audio_folder import AudioFolder, NoAudio
from rxchain.sinks.several import Several
from rxchain.sources.health import SourceHealth, Watched
from rxchain.sources.opening import RECEIVER_PREFIX, open_source
from rxchain.sources.pacing import Paced

if TYPE_CHECKING:
    from rxchain.logbook.station_log import StationLog


@dataclass(frozen=True, slots=True)
class Request:
    """What to receive, and what to do with it.

    options : the source's further keys, as written. log : the logbook, None for the usual one. listen : what to
    hear; it goes at live pace then.
    """

    source: str
    options: dict[str, str]
    channels: tuple[ChannelSettings, ...]
    out: Path | None
    log: LogRules | None
    live_pace: bool
    quiet: bool
    listen: Listen | None = None


@dataclass(frozen=True, slots=True)
class Result:
    """The receiver after its run, with all its figures, and the exit status that follows."""

    receiver: Receiver
    exit_status: int


def receive(request: Request) -> Result:
    """Carries out a request; raises :class:`~rxchain.errors.RequestError` before anything has started."""
    if not request.channels:
        raise SettingError("channel", "(none)", "there is nothing to receive", "add --channel 'FREQUENCY EMISSION'")
    check_names(request.channels)
    log_rules = _log_rules(request)
    _lift_allocation_threshold()
    options = parsed_options(request.options)
    if request.source.partition(":")[0] == RECEIVER_PREFIX:
        options = _receiver_options(options, request.channels)
    source = open_source(request.source, **options)
    is_live = source.info.n_samples is None
    stop = threading.Event()
    live_pace = request.live_pace or request.listen is not None
    if live_pace and not is_live:
        source = Paced(source, time.monotonic, lambda seconds: stop.wait(seconds))
    listening = None
    try:
        receiver = Receiver(source.info, live_where_heard(request.channels, request.listen))
        listening = open_listening(request.listen, receiver) if request.listen else None
        sink = AudioFolder(request.out, receiver) if request.out else NoAudio()
        log = None if log_rules is None else _station_log(log_rules, receiver)
    except BaseException:
        if listening is not None:
            listening.close()
        source.close()
        raise
    if is_live or live_pace:
        sys.setswitchinterval(1e-4)  # the display must not hold the numeric thread up for 5 ms at a time
    commands = Commands()
    display: Display = make_display(quiet=request.quiet, operations=Operator(commands, receiver, listening, log))
    watched = source if isinstance(source, Watched) else None
    runner = Runner(
        source,
        receiver,
        Several([sink, listening]) if listening else sink,
        time.monotonic,
        display.show if display.wants_status else None,
        (lambda: watched.health) if watched else SourceHealth,
        listening.status if listening else lambda: None,
        log.after_block if log is not None else lambda: None,
        commands,
    )

    def stop_all() -> None:
        stop.set()
        runner.stop()

    with _stopped_by_signals(stop_all), display.running(stop_all):
        outcome = runner.run()
        if listening is not None:
            listening.close()
    fault = outcome.fault
    if log is not None:
        log.close(one_line(str(fault)) if fault else "stopped" if outcome.stopped else "ended")
    try:
        sink.close()
    except FaultError as error:
        fault = fault or error
    if fault is not None:
        print(f"rxchain: {one_line(str(fault))}; {span_text(receiver)}, and that is kept", file=sys.stderr)
        return Result(receiver, fault.exit_status)
    return Result(receiver, 130 if outcome.stopped else 0)


def _log_rules(request: Request) -> LogRules | None:
    """Where the logbook goes and what it keeps; None where no channel is logged."""
    logged = [channel for channel in request.channels if channel.log != OFF]
    if not logged:
        if request.log is not None:
            raise SettingError(
                "log", request.log.folder, "no channel is logged", "give a channel log=transmissions or log=all"
            )
        return None
    if request.log is not None:
        return request.log
    if request.out is None:
        raise SettingError("log", logged[0].log, "the logbook needs a folder", "add --log DIR or --out DIR")
    return LogRules(request.out / "log")


def _station_log(rules: LogRules, receiver: Receiver) -> StationLog:
    from rxchain.logbook.station_log import StationLog

    return StationLog(
        rules.folder, receiver, time.monotonic, lambda: dt.datetime.now(dt.UTC), rules.budget_bytes, rules.keep_days
    )


def _receiver_options(options: dict[str, Any], channels: tuple[ChannelSettings, ...]) -> dict[str, Any]:
    """A receiver's options with what follows from the channels; says so where the spike lies in one."""
    rate_hz = options.get("rate_hz")
    if rate_hz is None:
        return options
    if options.get("centre_hz") is None:
        return options | {"centre_hz": centre_beside(channels, rate_hz)}
    spoilt = channels_on_spike(channels, options["centre_hz"])
    if spoilt:
        print(
            f"rxchain: the receiver's own spike at its centre lies in {', '.join(spoilt)}; "
            "leave out --centre, and it is kept out of every channel",
            file=sys.stderr,
        )
    return options


@contextmanager
def _stopped_by_signals(stop: Callable[[], None]) -> Iterator[None]:
    """The first interrupt or termination asks the run to end, a second interrupt breaks it off."""
    previous: dict[int, Any] = {}

    def on_signal(number: int, _: FrameType | None) -> None:
        signal.signal(number, previous[number])
        stop()

    if threading.current_thread() is threading.main_thread():
        for number in (signal.SIGINT, signal.SIGTERM):
            previous[number] = signal.signal(number, on_signal)
    try:
        yield
    finally:
        for changed, handler in previous.items():
            signal.signal(changed, handler)


def _lift_allocation_threshold() -> None:
    """Frees one large block, after which the C library keeps memory of that size instead of returning it each time.

    Without it every transform's buffers are mapped and unmapped anew, which costs as much as the transform.
    """
    np.empty(30 << 20, np.uint8)
