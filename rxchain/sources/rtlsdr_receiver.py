"""The USB receiver, through pyrtlsdr: bytes from the driver's buffers, with nothing lost unsaid.

The driver calls back on a thread of ours; the callback copies the bytes, queues them and returns. A full queue gives up
its oldest buffer, and what was given up is reported as lost before the next block. A receiver that falls silent, is
unplugged, or whose stream ends without having been asked to, is lost: what had come until then is delivered first.

pyrtlsdr's setters close the device when the driver refuses a value, which hangs while streaming; here everything is set
before the stream starts.
"""

from __future__ import annotations

import collections
import contextlib
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from types import ModuleType
from typing import Any

import numpy as np

from rxchain.errors import SettingError, SourceError, SourceLost
from rxchain.sources.protocol import SourceInfo
from rxchain.sources.sample_formats import CU8
from rxchain.streams import Block

_BUFFER_BYTES = 131_072  # a multiple of 512, which the driver asks for; 27 ms at 2.4 MS/s
_QUEUED_BUFFERS = 64
_SILENT_S = 2.0  # no buffer for so long: the receiver hangs
_DIRECT_SAMPLING = {"i": 1, "q": 2}
# The chip's two ranges of sample rates (its data sheet is not public; common practice).
_RATES_HZ = ((225_001.0, 300_000.0), (900_001.0, 3_200_000.0))


@dataclass(frozen=True, slots=True)
class ReceiverSettings:
    """How to set a receiver.

    gain_db : tuner gain; None lets the tuner choose. ppm : correction of its clock, whole parts per million.
    direct_sampling : ``i`` or ``q``: the converter's input that bypasses the tuner; None for the tuner.
    """

    rate_hz: float
    centre_hz: float
    gain_db: float | None = None
    ppm: int = 0
    direct_sampling: str | None = None


class RtlsdrReceiver:
    """A stream from the receiver with that serial number, or the first; its antenna line carries no voltage."""

    def __init__(self, serial: str | None, settings: ReceiverSettings) -> None:
        if not any(low <= settings.rate_hz <= high for low, high in _RATES_HZ):
            raise SettingError(
                "rate", f"{settings.rate_hz:g}Hz", "the receiver samples at 226 to 300 kS/s or 0.9 to 3.2 MS/s"
            )
        if not 0 < settings.centre_hz < 2**32:
            raise SettingError("centre", f"{settings.centre_hz:g}Hz", "the receiver tunes from 0 to 4.29 GHz")
        if settings.direct_sampling not in (None, *_DIRECT_SAMPLING):
            raise SettingError("direct_sampling", settings.direct_sampling, "must be i or q")
        module = _driver()
        index = _index(module, serial)
        self._condition = threading.Condition()
        self._queue: collections.deque[np.ndarray[Any, np.dtype[np.uint8]]] = collections.deque()
        self._dropped = 0
        self._ended: str | None = None
        self._closing = False
        self._streaming = False
        try:
            self._device = module.RtlSdr(device_index=index)
            _set(self._device, settings)
            rate_hz = float(self._device.get_sample_rate())
        except Exception as error:  # the binding raises errors of many kinds
            raise SourceError(f"rtlsdr: the receiver could not be opened and set: {_text(error)}") from error
        name = f"rtlsdr:{serial}" if serial else "rtlsdr"
        self._info = SourceInfo("receiver", name, rate_hz, settings.centre_hz, None, None)
        self._thread = threading.Thread(target=self._stream, name="rtlsdr", daemon=True)

    @property
    def info(self) -> SourceInfo:
        """What is known before the first sample."""
        return self._info

    def blocks(self) -> Iterator[Block]:
        """Blocks as they come; ends after :meth:`close`, raises :class:`SourceLost` when the receiver is gone."""
        self._streaming = True
        self._thread.start()
        index = 0
        while True:
            with self._condition:
                arrived = self._condition.wait_for(lambda: self._queue or self._ended is not None, timeout=_SILENT_S)
                if self._closing:
                    return
                lost, self._dropped = self._dropped // CU8.sample_bytes, 0
                data = self._queue.popleft() if self._queue else None
                ended = self._ended
            if data is not None:
                iq, overloaded = CU8.decode(data)
                index += lost
                yield Block(iq, index, lost, overloaded)
                index += len(iq)
            elif ended is not None:
                raise SourceLost(f"{self._info.name}: the receiver is gone: {ended}")
            elif not arrived:
                raise SourceLost(f"{self._info.name}: no samples for {_SILENT_S:g} s: the receiver hangs")

    def close(self) -> None:
        """Stops the stream and releases the receiver; may be called twice, and from another thread."""
        with self._condition:
            if self._closing:
                return
            self._closing = True
            running = self._streaming and self._ended is None
            self._condition.notify_all()
        if running:
            # Asking twice, or when nothing runs, closes the device under the stream's feet: hence once, and guarded.
            with contextlib.suppress(Exception):
                self._device.cancel_read_async()
            self._thread.join(timeout=_SILENT_S)
        if not self._thread.is_alive() and getattr(self._device, "device_opened", False):
            with contextlib.suppress(Exception):
                self._device.close()

    def _stream(self) -> None:
        try:
            self._device.read_bytes_async(self._take, _BUFFER_BYTES)
            reason = "its stream ended"
        except Exception as error:
            reason = _text(error)
        with self._condition:
            self._ended = reason
            self._condition.notify_all()

    def _take(self, buffer: Any, _: object) -> None:
        """The driver's callback: copy, queue, count, return. The buffer is the driver's own memory."""
        data = np.ctypeslib.as_array(buffer).view(np.uint8).copy()
        data = data[: len(data) // CU8.sample_bytes * CU8.sample_bytes]
        if not len(data):
            return
        with self._condition:
            if len(self._queue) >= _QUEUED_BUFFERS:
                self._dropped += len(self._queue.popleft())
            self._queue.append(data)
            self._condition.notify()


def _driver() -> ModuleType:
    try:
        import rtlsdr
    except Exception as error:  # ImportError, OSError or AttributeError, depending on what the system's library lacks
        raise SourceError(
            "rtlsdr: the receiver's driver cannot be loaded; install it with: pip install 'pyrtlsdr[lib]' "
            f"({_text(error)})"
        ) from error
    return rtlsdr  # type: ignore[no-any-return]


def _index(module: ModuleType, serial: str | None) -> int:
    """Index of the wanted receiver; the driver's own messages for a missing one mislead."""
    serials = list(module.RtlSdr.get_device_serial_addresses())
    if not serials:
        raise SourceError("rtlsdr: no receiver found on USB; plug one in, and see that your user may open USB devices")
    if serial is None:
        return 0
    if serial not in serials:
        raise SourceError(f"rtlsdr:{serial}: no receiver with this serial number; there are: {', '.join(serials)}")
    return serials.index(serial)


def _set(device: Any, settings: ReceiverSettings) -> None:
    device.set_sample_rate(settings.rate_hz)
    if settings.ppm:  # setting the value that is already set is refused by the driver
        device.set_freq_correction(settings.ppm)
    if settings.direct_sampling:
        device.set_direct_sampling(_DIRECT_SAMPLING[settings.direct_sampling])
    device.set_center_freq(settings.centre_hz)
    device.set_gain("auto" if settings.gain_db is None else settings.gain_db)


def _text(error: BaseException) -> str:
    return " ".join(str(error).split()) or type(error).__name__
