"""``rxchain devices``: which receivers and sound outputs can be used here, and what is missing."""

from __future__ import annotations

import argparse
from typing import Any

_EXAMPLES = """\
examples:
  rxchain devices
  rxchain devices --json
  rxchain devices --calibrate 100.1MHz     # learns the error of the receiver's clock from a carrier known to be there"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's arguments."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EXAMPLES
    parser.add_argument("--json", action="store_true", help="as JSON, for programs")
    parser.add_argument(
        "--calibrate", metavar="FREQUENCY", help="measures the receiver's clock against a carrier of that frequency"
    )
    parser.add_argument("--receiver", metavar="SERIAL", help="the receiver to calibrate: serial number or index")
    parser.add_argument("--gain", metavar="DB", help="its gain in dB; auto (its own) if left out")


def run(arguments: argparse.Namespace) -> int:
    """Lists what there is, or calibrates; returns the exit status."""
    from rxchain.errors import SettingError

    if arguments.calibrate is not None:
        return _calibrate(arguments)
    for key in ("receiver", "gain"):
        if getattr(arguments, key) is not None:
            raise SettingError(key, getattr(arguments, key), "is for calibrating", "add --calibrate FREQUENCY")
    found = {"receivers": _receivers(), "sound_outputs": _outputs()}
    if arguments.json:
        import json

        print(json.dumps(found, indent=2, ensure_ascii=False))
    else:
        print("\n".join(_in_words(found)))
    return 0


def _receivers() -> dict[str, Any]:
    from rxchain.errors import SourceError
    from rxchain.sources.rtlsdr_driver import driver, serials

    try:
        module = driver()
    except SourceError as error:
        return {"devices": [], "missing": str(error)}
    there = [
        {"source": f"rtlsdr:{serial}", "index": index, "serial": serial, "name": _name(module, index)}
        for index, serial in enumerate(serials(module))
    ]
    missing = None if there else "no receiver on USB; plug one in, and see that your user may open USB devices"
    return {"devices": there, "missing": missing}


def _name(module: Any, index: int) -> str:
    name = module.librtlsdr.rtlsdr_get_device_name(index)
    return name.decode(errors="replace") if isinstance(name, bytes) else str(name)


def _outputs() -> dict[str, Any]:
    from dataclasses import asdict

    from rxchain.errors import RequestError
    from rxchain.sinks.sound_output import outputs

    try:
        there = [asdict(one) for one in outputs()]
    except RequestError as error:
        return {"devices": [], "missing": str(error)}
    return {"devices": there, "missing": None if there else "no sound output was found; connect one"}


def _in_words(found: dict[str, Any]) -> list[str]:
    from rxchain.cli.main import one_line

    receivers, sound = found["receivers"], found["sound_outputs"]
    lines = ["USB receivers:"]
    lines += [f"  {one['source']}  {one_line(one['name'])} (index {one['index']})" for one in receivers["devices"]]
    lines += [*_missing(receivers), "sound outputs:"]
    for one in sound["devices"]:
        default = ", the system's choice" if one["is_default"] else ""
        lines.append(
            f"  {one['number']}  {one_line(one['name'])} "
            f"({one['interface']}, {one['channels']} channels, {one['rate_hz']:.0f} Hz{default})"
        )
    return lines + _missing(sound)


def _missing(part: dict[str, Any]) -> list[str]:
    return [f"  none: {part['missing']}"] if part["missing"] else []


def _calibrate(arguments: argparse.Namespace) -> int:
    import sys

    from rxchain.cli.source_options import parsed_options
    from rxchain.sources.rtlsdr_calibration import calibrate
    from rxchain.units import format_frequency, parse_frequency_hz

    frequency_hz = parse_frequency_hz(arguments.calibrate, "calibrate")
    gain_db = parsed_options({"gain": arguments.gain or "auto"}).get("gain_db")
    if not arguments.json:
        print(f"listening for the carrier on {format_frequency(frequency_hz)} ...", file=sys.stderr)
    found = calibrate(arguments.receiver, frequency_hz, gain_db)
    if arguments.json:
        import json

        print(
            json.dumps(
                {"serial": found.serial, "ppm": {"value": found.ppm, "uncertainty": found.uncertainty_ppm},
                 "offset_hz": found.offset_hz, "snr_db": found.snr_db}, indent=2,
            )
        )  # fmt: skip
    else:
        print(
            f"rtlsdr:{found.serial}: {found.ppm:.2f} ± {found.uncertainty_ppm:.2f} ppm "
            f"(carrier {found.offset_hz:+.1f} Hz off, {found.snr_db:.0f} dB over the noise beside it): "
            f"use --ppm {found.ppm:.2f}"
        )
    return 0
