"""The options that describe a source, for every command that reads one."""

from __future__ import annotations

import argparse
import sys
from collections.abc import Mapping
from typing import Any

_KEYS = ("rate", "centre", "capture", "gain", "ppm", "direct_sampling", "bias_voltage")

_BIAS_WARNING = (
    "rxchain: bias voltage on: about 4.5 V on the antenna line, which harms what is not made for it; "
    "it goes off when this run ends"
)


def add_source_arguments(parser: argparse.ArgumentParser) -> None:
    """The arguments that a source may need."""
    parser.add_argument("--rate", metavar="FREQUENCY", help="samples a second, of a raw file or the receiver")
    parser.add_argument(
        "--centre",
        metavar="FREQUENCY",
        help="frequency at the middle, of a file that doesn't say, or to tune to "
        "(left out, a receiver is tuned so that its own spike at the middle is in no channel)",
    )
    parser.add_argument(
        "--capture", metavar="N", help="which capture of a recording whose captures lie at different frequencies"
    )
    parser.add_argument(
        "--gain",
        metavar="DB",
        help="receiver's gain in dB, auto (its own; this if left out), or headroom (just below overload)",
    )
    parser.add_argument("--ppm", metavar="N", help="error of the receiver's clock, parts per million")
    parser.add_argument(
        "--direct-sampling", choices=("i", "q"), metavar="i|q", help="receiver's input that bypasses the tuner"
    )
    parser.add_argument(
        "--bias-voltage",
        choices=("on", "off"),
        metavar="on|off",
        help="voltage on the antenna line to feed a preamplifier; harms what is not made for it; off if left out",
    )


def given_options(arguments: Mapping[str, Any]) -> dict[str, str]:
    """Those that were given, as written."""
    return {key: value for key in _KEYS if (value := arguments.get(key)) is not None}


def parsed_options(options: dict[str, str]) -> dict[str, Any]:
    """The source's keys as numbers; a warning is printed of what can do harm."""
    from rxchain.errors import SettingError
    from rxchain.units import parse_frequency_hz

    parsed: dict[str, Any] = {}
    for key in ("rate", "centre"):
        if key in options:
            parsed[f"{key}_hz"] = parse_frequency_hz(options[key], key)
    if "capture" in options:
        try:
            parsed["capture"] = int(options["capture"])
        except ValueError:
            raise SettingError("capture", options["capture"], "must be a whole number") from None
    if "ppm" in options:
        parsed["ppm"] = _number("ppm", options["ppm"], "must be a number of millionths")
    gain = options.get("gain", "auto")
    if gain == "headroom":
        parsed["headroom"] = True
    elif gain != "auto":
        parsed["gain_db"] = _number("gain", gain.removesuffix("dB"), "must be auto, headroom or a number of dB")
    if "bias_voltage" in options:
        if options["bias_voltage"] not in ("on", "off"):
            raise SettingError("bias_voltage", options["bias_voltage"], "must be on or off")
        parsed["bias_voltage"] = options["bias_voltage"] == "on"
        if parsed["bias_voltage"]:
            print(_BIAS_WARNING, file=sys.stderr)
    if "direct_sampling" in options:
        parsed["direct_sampling"] = options["direct_sampling"]
    return parsed


def _number(key: str, text: str, rule: str) -> float:
    import math

    from rxchain.errors import SettingError

    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise SettingError(key, text, rule)
    return value
