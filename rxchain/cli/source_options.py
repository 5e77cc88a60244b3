"""The options that describe a source, for every command that reads one."""

from __future__ import annotations

import argparse
from collections.abc import Mapping
from typing import Any

_KEYS = ("rate", "centre", "capture", "gain", "ppm", "direct_sampling")


def add_source_arguments(parser: argparse.ArgumentParser) -> None:
    """The arguments that a source may need."""
    parser.add_argument("--rate", metavar="FREQUENCY", help="samples a second, of a raw file or the receiver")
    parser.add_argument(
        "--centre", metavar="FREQUENCY", help="frequency at the middle, of a file that doesn't say, or to tune to"
    )
    parser.add_argument(
        "--capture", metavar="N", help="which capture of a recording whose captures lie at different frequencies"
    )
    parser.add_argument("--gain", metavar="DB", help="receiver's gain in dB; auto (its own) if left out")
    parser.add_argument("--ppm", metavar="N", help="receiver's frequency correction, parts per million")
    parser.add_argument(
        "--direct-sampling", choices=("i", "q"), metavar="i|q", help="receiver's input that bypasses the tuner"
    )


def given_options(arguments: Mapping[str, Any]) -> dict[str, str]:
    """Those that were given, as written."""
    return {key: value for key in _KEYS if (value := arguments.get(key)) is not None}


def parsed_options(options: dict[str, str]) -> dict[str, Any]:
    """The source's keys as numbers."""
    from rxchain.errors import SettingError
    from rxchain.units import parse_frequency_hz

    parsed: dict[str, Any] = {}
    for key in ("rate", "centre"):
        if key in options:
            parsed[f"{key}_hz"] = parse_frequency_hz(options[key], key)
    for key in ("capture", "ppm"):
        if key in options:
            try:
                parsed[key] = int(options[key])
            except ValueError:
                raise SettingError(key, options[key], "must be a whole number") from None
    if options.get("gain", "auto") != "auto":
        try:
            parsed["gain_db"] = float(options["gain"].removesuffix("dB"))
        except ValueError:
            raise SettingError("gain", options["gain"], "must be auto or a number of dB") from None
    if "direct_sampling" in options:
        parsed["direct_sampling"] = options["direct_sampling"]
    return parsed
