"""The USB receiver's driver through pyrtlsdr: which receivers there are, and one of them opened and set.

The binding's own setters close the device when the driver refuses a value, and closing waits for a running stream: a
refused retune would hang for ever. So the driver's calls are made here directly, and a refusal is an error and no more.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from dataclasses import dataclass
from types import ModuleType
from typing import Any

from rxchain.errors import SettingError, SourceError

INSTALL = "pip install 'pyrtlsdr[lib]'"
_DIRECT_SAMPLING = {"i": 1, "q": 2}
# The chip's two ranges of sample rates (its data sheet is not public; common practice).
_RATES_HZ = ((225_001.0, 300_000.0), (900_001.0, 3_200_000.0))
_BUFFERS = 64  # that the driver keeps in flight; each a few milliseconds of slack for this program
# What the USB library's codes mean to an operator (libusb's list of error codes).
_MEANINGS = {
    -1: "USB input or output error",
    -3: "your user may not open it; give it access to USB devices (on Linux, a udev rule)",
    -4: "it is no longer there",
    -6: "another program or a kernel module has it open",
    -12: "the system has no USB driver for it",
}


@dataclass(frozen=True, slots=True)
class ReceiverSettings:
    """How to set a receiver.

    gain_db : tuner gain; None lets the tuner choose. headroom : the chain chooses, from what the converter gets.
    ppm : error of its clock, parts per million; the driver takes whole ones, the rest is put right in the figures.
    direct_sampling : ``i`` or ``q``: the converter's input that bypasses the tuner; None for the tuner.
    bias_voltage : voltage on the antenna line, for a preamplifier. patience_s : how long a lost receiver is looked for.
    """

    rate_hz: float
    centre_hz: float
    gain_db: float | None = None
    ppm: float = 0.0
    direct_sampling: str | None = None
    headroom: bool = False
    bias_voltage: bool = False
    patience_s: float = float("inf")

    def check(self) -> None:
        """Raises :class:`SettingError` where a value can't be."""
        if not any(low <= self.rate_hz <= high for low, high in _RATES_HZ):
            raise SettingError(
                "rate", f"{self.rate_hz:g}Hz", "the receiver samples at 226 to 300 kS/s or 0.9 to 3.2 MS/s"
            )
        check_centre(self.centre_hz)
        if self.direct_sampling not in (None, *_DIRECT_SAMPLING):
            raise SettingError("direct_sampling", self.direct_sampling, "must be i or q")
        if not abs(self.ppm) <= 500.0:
            raise SettingError("ppm", f"{self.ppm:g}", "must lie between -500 and 500")


def check_centre(centre_hz: float) -> None:
    """Raises :class:`SettingError` where the driver cannot even take the number."""
    if not 0 < centre_hz < 2**32:
        raise SettingError("centre", f"{centre_hz:g}Hz", "the receiver tunes from 0 to 4.29 GHz")


class Refusal(Exception):
    """The driver refused a call."""


class Device:
    """An open receiver, set as wanted; raises :class:`SourceError` where it can't be.

    rate_hz, centre_hz : what is received in truth, its clock's error reckoned in. gains_db : the tuner's gains.
    """

    def __init__(self, wanted: str | None, settings: ReceiverSettings) -> None:
        module = driver()
        index, self.serial = find(module, wanted)
        self._library = module.librtlsdr
        self._settings = settings
        try:
            self._binding: Any = module.RtlSdr(device_index=index)
            self._binding.DEFAULT_ASYNC_BUF_NUMBER = _BUFFERS
            self.gains_db = sorted(gain / 10.0 for gain in self._binding.gain_values)
            self._set()
            rate_hz = float(self._library.rtlsdr_get_sample_rate(self._binding.dev_p))
        except Exception as error:  # the binding raises errors of many kinds
            raise SourceError(f"rtlsdr: the receiver could not be opened and set: {meaning(error)}") from error
        self._residual = 1e-6 * (settings.ppm - round(settings.ppm))
        self.rate_hz = rate_hz * (1.0 + self._residual)

    def true_centre_hz(self, centre_hz: float) -> float:
        """The frequency at the middle of the stream when tuned there."""
        return round(centre_hz) * (1.0 + self._residual)

    def tune(self, centre_hz: float) -> None:
        """Tunes, also while streaming; raises :class:`Refusal`."""
        self._call("set_center_freq", round(centre_hz))

    def set_gain_db(self, gain_db: float) -> None:
        """Sets the nearest of the tuner's gains, also while streaming; raises :class:`Refusal`."""
        nearest_db = min(self.gains_db, key=lambda one: abs(one - gain_db))
        self._call("set_tuner_gain_mode", 1)
        self._call("set_tuner_gain", round(10 * nearest_db))

    def stream(self, take: Callable[[Any, object], None], buffer_bytes: int) -> None:
        """Calls ``take`` with every buffer until the stream is cancelled or breaks off."""
        self._binding.read_bytes_async(take, buffer_bytes)

    def cancel(self) -> None:
        """Asks a running stream to end; at most once, and only while it runs."""
        with contextlib.suppress(Exception):
            self._binding.cancel_read_async()

    def close(self) -> None:
        """Takes the voltage off the antenna line and releases the receiver; its stream must have ended."""
        if not getattr(self._binding, "device_opened", False):
            return
        with contextlib.suppress(Exception):
            if self._settings.bias_voltage:
                self._call("set_bias_tee", 0)
        with contextlib.suppress(Exception):
            self._binding.close()

    def _set(self) -> None:
        settings = self._settings
        self._call("set_bias_tee", 0)  # whatever another program left behind
        self._call("set_sample_rate", round(settings.rate_hz))
        if round(settings.ppm):  # setting the value that is already set is refused by the driver
            self._call("set_freq_correction", round(settings.ppm))
        if settings.direct_sampling:
            self._call("set_direct_sampling", _DIRECT_SAMPLING[settings.direct_sampling])
        self.tune(settings.centre_hz)
        if settings.gain_db is not None:
            self.set_gain_db(settings.gain_db)
        else:
            self._call("set_tuner_gain_mode", 0)
        if settings.bias_voltage:
            self._call("set_bias_tee", 1)

    def _call(self, name: str, value: int) -> None:
        code = getattr(self._library, f"rtlsdr_{name}")(self._binding.dev_p, value)
        if code < 0:
            what = name.removeprefix("set_").replace("_", " ")
            raise Refusal(f"the driver refuses {what} {value} ({_MEANINGS.get(code, f'code {code}')})")


def driver() -> ModuleType:
    """The binding, with the driver's library loaded; raises :class:`SourceError` that says what to install."""
    try:
        import rtlsdr
    except Exception as error:  # ImportError, OSError or AttributeError, depending on what the system's library lacks
        raise SourceError(
            f"rtlsdr: the receiver's driver cannot be loaded; install it with: {INSTALL} ({meaning(error)})"
        ) from error
    return rtlsdr  # type: ignore[no-any-return]


def serials(module: ModuleType) -> list[str]:
    """Serial numbers of the receivers on USB, in the driver's order."""
    return list(module.RtlSdr.get_device_serial_addresses())


def find(module: ModuleType, wanted: str | None) -> tuple[int, str]:
    """Index and serial number of the receiver with that serial number or index; the driver's own messages mislead."""
    there = serials(module)
    if not there:
        raise SourceError("rtlsdr: no receiver found on USB; plug one in, and see that your user may open USB devices")
    if wanted is None:
        return 0, there[0]
    if wanted in there:
        return there.index(wanted), wanted
    if wanted.isdecimal() and int(wanted) < len(there):
        return int(wanted), there[int(wanted)]
    raise SourceError(f"rtlsdr:{wanted}: no receiver with this serial number or index; there are: {', '.join(there)}")


def meaning(error: BaseException) -> str:
    """An error of the binding in words."""
    text = " ".join(str(error).split()) or type(error).__name__
    said = _MEANINGS.get(getattr(error, "errno", None) or 0)
    return f"{said} ({text})" if said else text
