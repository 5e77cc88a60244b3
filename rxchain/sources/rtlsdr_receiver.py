"""The USB receiver as a source: nothing is lost unsaid, and a receiver that goes away is looked for.

The driver calls back on a thread of ours; the callback copies the bytes, queues them and returns. A full queue gives up
its oldest buffer; what was given up, came short or is missing by the clock is reported as lost before the next block. A
receiver that falls silent or is unplugged is closed and opened again when it is back, at growing intervals. Meanwhile
blocks without samples tell how much time is being lost, so that everything after the source stays on the clock.
"""

from __future__ import annotations

import collections
import datetime as dt
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from rxchain.errors import SettingError, SourceError, SourceLost
from rxchain.sources.arrival_watch import ArrivalWatch
from rxchain.sources.headroom import Headroom
from rxchain.sources.health import SourceHealth
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.rtlsdr_driver import Device, ReceiverSettings, Refusal, check_centre, meaning
from rxchain.sources.sample_formats import CU8
from rxchain.streams import Block

_BUFFER_S = 0.0068
_BUFFER_UNIT = 512  # bytes; the driver asks for multiples
_QUEUED_S = 1.8
_STALLED_S, _HANGS_S = 0.5, 2.0
_LOOK_S = 0.1
_FIRST_WAIT_S, _LONGEST_WAIT_S = 0.5, 8.0
_TELL_S = 0.02  # a gap is told in parts as small as what would have come, so that what is heard stays on its delay
_MARGIN_S = 0.1  # of a gap is not told yet, for the buffer that ends it was under way
_RETUNED_BUFFERS = 12  # hold samples of both frequencies; longer than the channel bank's memory


@dataclass(slots=True)
class _Buffer:
    """What the driver delivered. lost : samples missing before it. centre_hz : where it was tuned to since the last."""

    data: np.ndarray[Any, np.dtype[np.uint8]]
    lost: int
    centre_hz: float | None


class RtlsdrReceiver:
    """A stream from the receiver with that serial number or index, or from the first; ``serial`` tells which it is."""

    def __init__(self, wanted: str | None, settings: ReceiverSettings, clock: Callable[[], float] = time.monotonic):
        settings.check()
        self._settings, self._clock = settings, clock
        self._device = Device(wanted, settings)
        self.serial = self._device.serial
        name = f"rtlsdr:{wanted}" if wanted else "rtlsdr"
        rate_hz = self._device.rate_hz
        centre_hz = self._device.true_centre_hz(settings.centre_hz)
        self._info = SourceInfo("receiver", name, rate_hz, centre_hz, dt.datetime.now(dt.UTC), None)
        self._buffer_bytes = max(8, round(2 * _BUFFER_S * rate_hz / _BUFFER_UNIT)) * _BUFFER_UNIT
        self._most_queued = round(2 * _QUEUED_S * rate_hz / self._buffer_bytes)
        self._watch = ArrivalWatch(rate_hz, self._buffer_bytes // CU8.sample_bytes)
        self._headroom = Headroom(self._device.gains_db, rate_hz) if settings.headroom else None
        self._condition = threading.Condition()
        self._queue: collections.deque[_Buffer] = collections.deque()
        self._lost = 0  # samples, before the next buffer that is queued
        self._gap: tuple[float, int] | None = None
        self._discard = 0
        self._new_centre_hz: float | None = None
        self._closing = self._running = False
        self._ended: str | None = None
        self._last_s = clock()
        self._trouble: str | None = None
        self._short = self._reopened = 0
        self._gain_db = settings.gain_db
        if self._headroom is not None:
            self._gain_db = self._headroom.gain_db
            self._device.set_gain_db(self._gain_db)

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample; its start to within the time that setting up takes."""
        return self._info

    @property
    def health(self) -> SourceHealth:
        """What went wrong so far, and what is wrong now."""
        return SourceHealth(self._trouble, self._watch.late, self._short, self._reopened, self._gain_db)

    def retune(self, centre_hz: float) -> None:
        """Tunes elsewhere while the stream runs, from any thread; raises :class:`SettingError` where that's refused.

        The samples during which the tuner settles are reported as lost, and the next block tells its new centre.
        """
        check_centre(centre_hz)
        with self._condition:
            try:
                self._device.tune(centre_hz)
            except Refusal as error:
                raise SettingError("centre", f"{centre_hz:g}Hz", str(error)) from error
            self._settings = replace(self._settings, centre_hz=centre_hz)
            self._new_centre_hz = self._device.true_centre_hz(centre_hz)
            self._discard = _RETUNED_BUFFERS

    def blocks(self) -> Iterator[Block]:
        """Blocks as they come; ends after :meth:`close`, raises :class:`SourceLost` when patience is at its end."""
        index = 0
        self._start()
        while True:
            with self._condition:
                self._condition.wait_for(lambda: self._queue or self._ended or self._closing, timeout=_LOOK_S)
                if self._closing:
                    return
                buffer = self._queue.popleft() if self._queue else None
                silent_s = self._clock() - self._last_s
                ended = self._ended
            if buffer is not None:
                self._trouble = None
                block = self._decoded(buffer, index + buffer.lost)
                index = block.index + len(block.iq)
                yield block
            elif ended is not None or silent_s > _HANGS_S:
                for block in self._until_back(index, ended or f"no samples for {_HANGS_S:g} s: it hangs"):
                    index = block.index
                    yield block
            else:
                if silent_s > _STALLED_S:
                    self._trouble = f"no samples for {silent_s:.1f} s"
                yield Block(np.zeros(0, np.complex64), index)

    def close(self) -> None:
        """Stops the stream and releases the receiver; may be called twice, and from another thread."""
        with self._condition:
            if self._closing:
                return
            self._closing = True
            self._condition.notify_all()
        self._stop()

    def _decoded(self, buffer: _Buffer, index: int) -> Block:
        iq, overloaded = CU8.decode(buffer.data)
        if self._headroom is not None:
            peak = max(float(buffer.data.max()) - CU8.offset, CU8.offset - float(buffer.data.min())) / CU8.full_scale
            if self._headroom.see(len(iq), peak, overloaded):
                try:
                    self._device.set_gain_db(self._headroom.gain_db)
                    self._gain_db = self._headroom.gain_db
                except Refusal as error:
                    self._trouble = str(error)
        return Block(iq, index, buffer.lost, overloaded, buffer.centre_hz)

    def _start(self) -> None:
        self._ended, self._running, self._discard = None, True, 0
        self._last_s = self._clock()
        self._watch.restart()
        self._thread = threading.Thread(target=self._stream, args=(self._device,), name="rtlsdr", daemon=True)
        self._thread.start()

    def _stop(self) -> None:
        """Cancel, join, close, in this order: closing waits for the stream."""
        if self._running and self._ended is None:
            self._device.cancel()
        if self._running:
            self._thread.join(timeout=_HANGS_S)
            if self._thread.is_alive():
                return  # the driver hangs; closing would hang with it
        self._running = False
        self._device.close()

    def _stream(self, device: Device) -> None:
        try:
            device.stream(self._take, self._buffer_bytes)
            reason = "its stream ended"
        except Exception as error:
            reason = meaning(error)
        with self._condition:
            self._ended = reason
            self._condition.notify_all()

    def _take(self, buffer: Any, _: object) -> None:
        """The driver's callback: copy, queue, count, return. The buffer is the driver's own memory."""
        data = np.ctypeslib.as_array(buffer).view(np.uint8).copy()
        data = data[: len(data) // CU8.sample_bytes * CU8.sample_bytes]
        n, whole = len(data) // CU8.sample_bytes, self._buffer_bytes // CU8.sample_bytes
        with self._condition:
            now_s = self._last_s = self._clock()
            if self._gap is not None:
                (lost_s, told), self._gap = self._gap, None
                self._lost = max(0, round((now_s - lost_s) * self._info.sample_rate_hz) - whole - told)
            self._lost += self._watch.arrived(whole, now_s)
            if self._discard:
                self._discard -= 1
                self._lost += n
            elif n:
                self._queue.append(_Buffer(data, self._lost, self._new_centre_hz))
                self._lost, self._new_centre_hz = 0, None
                self._give_up_oldest()
                self._condition.notify()
            if n < whole:
                self._short += 1
                self._lost += whole - n  # before the next

    def _give_up_oldest(self) -> None:
        while len(self._queue) > self._most_queued:
            oldest = self._queue.popleft()
            self._queue[0].lost += oldest.lost + len(oldest.data) // CU8.sample_bytes
            self._queue[0].centre_hz = self._queue[0].centre_hz or oldest.centre_hz

    def _until_back(self, index: int, reason: str) -> Iterator[Block]:
        """Blocks without samples until the receiver streams again, telling how long it has been away."""
        lost_s, next_s, wait_s, told = self._last_s, self._clock() + _FIRST_WAIT_S, _FIRST_WAIT_S, 0
        self._trouble = f"the receiver is gone: {reason}"
        self._stop()
        while True:
            now_s = self._clock()
            if now_s - lost_s > self._settings.patience_s:
                raise SourceLost(f"{self._info.name}: the receiver is gone: {reason}")
            if now_s >= next_s:
                try:
                    self._device = Device(self.serial, self._settings)
                    if self._gain_db is not None:
                        self._device.set_gain_db(self._gain_db)
                except (SourceError, Refusal) as error:
                    wait_s = min(2 * wait_s, _LONGEST_WAIT_S)
                    next_s = now_s + wait_s
                    self._trouble = (
                        f"the receiver is gone: {reason}; looked for again in {wait_s:g} s ({meaning(error)})"
                    )
                else:
                    break
            missing = round((now_s - lost_s - _MARGIN_S) * self._info.sample_rate_hz) - told
            if missing > 0:
                told += missing
                yield Block(np.zeros(0, np.complex64), index + told, missing)
            with self._condition:
                self._condition.wait_for(lambda: self._closing, timeout=_TELL_S)
                if self._closing:
                    return
        self._trouble = None
        self._reopened += 1
        self._gap = lost_s, told  # what is not told yet goes before the first buffer: its arrival says how much
        self._start()
        yield Block(np.zeros(0, np.complex64), index + told)
