"""``rxchain identify SOURCE``: what is in a capture, and how sure."""

from __future__ import annotations

import argparse

from rxchain.cli.source_options import add_source_arguments, given_options

_EPILOG = """\
Names: the emissions that receive knows, "noise only", "not of this family" (frequency modulation, data, a bare carrier),
or "can't tell". The confidence is the chance that the name is right, as found on emissions that took no part in learning.

examples:
  rxchain identify coast.sigmf-meta
  rxchain identify rtlsdr --rate 2.4MHz --centre 7.1MHz --seconds 20 --json"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's arguments."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EPILOG
    parser.add_argument("source", metavar="SOURCE", help="a recording, or rtlsdr[:serial]")
    parser.add_argument(
        "--seconds", metavar="S", help="how much of it to look at; all of a recording, 10 of a receiver"
    )
    parser.add_argument("--json", action="store_true", help="print JSON instead of a table")
    add_source_arguments(parser)


def run(arguments: argparse.Namespace) -> int:
    """Identifies; returns the exit status."""
    from rxchain.cli.identification import as_json, as_lines, identify

    seconds = None if arguments.seconds is None else _seconds(arguments.seconds)
    info, found = identify(arguments.source, given_options(vars(arguments)), seconds)
    for line in as_json(info, found) if arguments.json else as_lines(info, found):
        print(line)
    return 0


def _seconds(text: str) -> float:
    from rxchain.errors import SettingError

    try:
        seconds = float(text.removesuffix("s"))
    except ValueError:
        seconds = 0.0
    if not 1.0 <= seconds <= 86_400.0:
        raise SettingError("seconds", text, "must be a number from 1 to 86400")
    return seconds
