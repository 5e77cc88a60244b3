"""Sound outputs through sounddevice: finding one, feeding it, and noticing when it is gone.

Samples are written, not called for: the thread that writes waits until there is room, and an output that goes away is an
error where it can be handled. The sound library lists devices once; :func:`look_again` makes it look anew.
"""

from __future__ import annotations

import contextlib
import os
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from types import ModuleType
from typing import Any

import numpy as np

from rxchain.errors import RequestError, SinkError
from rxchain.streams import FloatBlock

INSTALL = "install PortAudio (Debian, Ubuntu: apt install libportaudio2) and: pip install sounddevice"
_LATENCY_S = 0.025
_QUIET = threading.Lock()


@dataclass(frozen=True, slots=True)
class OutputInfo:
    """A sound output: the number and name by which it is asked for, and what it takes."""

    number: int
    name: str
    interface: str
    channels: int
    rate_hz: float
    is_default: bool


def outputs() -> list[OutputInfo]:
    """The sound outputs there are; raises :class:`RequestError` that says what to install where the library is missing."""
    sounddevice = _library()
    default = sounddevice.default.device[1]
    interfaces = [str(one["name"]) for one in sounddevice.query_hostapis()]
    return [
        OutputInfo(
            number,
            str(device["name"]),
            interfaces[device["hostapi"]],
            int(device["max_output_channels"]),
            float(device["default_samplerate"]),
            number == default,
        )
        for number, device in enumerate(sounddevice.query_devices())
        if device["max_output_channels"] > 0
    ]


def find_output(wanted: str | None) -> OutputInfo:
    """The output with that number, name, or part of a name; the system's own choice where none is given."""
    there = outputs()
    if not there:
        raise RequestError("output=(any): no sound output was found; connect one, and see: rxchain devices")
    if wanted is None:
        return next((one for one in there if one.is_default), there[0])
    exact = [one for one in there if wanted in (str(one.number), one.name)]
    matching = exact or [one for one in there if wanted.lower() in one.name.lower()]
    listed = ", ".join(f"{one.number} ({one.name})" for one in matching or there)
    if not matching:
        raise RequestError(f"output={wanted}: no sound output of this number or name; there are: {listed}")
    if len(matching) > 1:
        raise RequestError(f"output={wanted}: fits several sound outputs; say which of: {listed}")
    return matching[0]


class SoundOutput:
    """An open output. ``rate_hz`` and ``channels`` are its own.

    write(frames) : float32, (n, 2), full scale 1.0; waits for room, returns whether the output had run dry before.
        Raises :class:`SinkError` when the output is gone.
    """

    def __init__(self, info: OutputInfo) -> None:
        sounddevice = _library()
        self.name, self.rate_hz = info.name, info.rate_hz
        self._channels = min(2, info.channels)
        self._failures = (sounddevice.PortAudioError, OSError, ValueError)
        try:
            with _library_kept_quiet():
                self._stream: Any = sounddevice.OutputStream(
                    device=info.number,
                    samplerate=info.rate_hz,
                    channels=self._channels,
                    dtype="float32",
                    latency=_LATENCY_S,
                )
                self._stream.start()
        except self._failures as error:
            raise SinkError(f"output={info.name}: cannot be opened: {_text(error)}") from error
        self.latency_s = float(self._stream.latency)

    def write(self, frames: FloatBlock) -> bool:
        """Plays what follows."""
        if self._channels == 1:
            frames = frames.mean(axis=1, keepdims=True, dtype=np.float32)
        try:
            return bool(self._stream.write(np.ascontiguousarray(frames)))
        except self._failures as error:
            raise SinkError(f"output={self.name}: {_text(error)}") from error

    def close(self) -> None:
        """Lets what was written play out, and releases the output."""
        with contextlib.suppress(*self._failures):
            self._stream.stop()
        with contextlib.suppress(*self._failures):
            self._stream.close()


def look_again() -> None:
    """Lists the devices anew; nothing may be open. The library has no public call for it."""
    sounddevice = _library()
    with _library_kept_quiet():
        sounddevice._terminate()
        sounddevice._initialize()


def abandon() -> None:
    """Leaves the library as it is at exit: an output that hangs would hang the interpreter with it."""
    import atexit

    atexit.unregister(_library()._exit_handler)


def _library() -> ModuleType:
    try:
        with _library_kept_quiet():
            import sounddevice
    except (ImportError, OSError) as error:
        raise RequestError(f"listen: no sound without the sound library; {INSTALL} ({_text(error)})") from error
    return sounddevice  # type: ignore[no-any-return]


@contextlib.contextmanager
def _library_kept_quiet() -> Iterator[None]:
    """The library's own remarks on every device it tried and did not find go nowhere."""
    with _QUIET:
        kept, nowhere = os.dup(2), os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, 2)
        try:
            yield
        finally:
            os.dup2(kept, 2)
            os.close(kept)
            os.close(nowhere)


def _text(error: BaseException) -> str:
    return " ".join(str(error).split()) or type(error).__name__
