"""``rxchain receive SOURCE``: receives every channel at once, and leaves audio and a summary."""

from __future__ import annotations

import argparse

from rxchain.cli.listen_options import add_listen_arguments, listen_of
from rxchain.cli.source_options import add_source_arguments, given_options

_EXAMPLES = """\
examples:
  rxchain receive coast.sigmf-meta --channel "7.1MHz J3E-LSB name=net" --out heard
  rxchain receive station.toml --out heard
  rxchain receive station.toml --listen harbour
  rxchain receive band.cu8 --rate 2.4MHz --centre 118.5MHz --channel "118.1MHz A3E"

A channel is FREQUENCY EMISSION [key=value ...], with auto for an EMISSION that is to be found out; the keys are those of
a [[channel]] table:
name, audio, detector, sideband, spacing, delay, align, beat, vestige, slope, transmit_response, agc, squelch,
notch, blanker, deemphasis, log."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's arguments."""
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.epilog = _EXAMPLES
    parser.add_argument(
        "source",
        metavar="SOURCE",
        help="a station file (.toml), a SigMF recording, a two-channel WAV, RF64 or FLAC file, "
        "a raw file (.cu8 .cs8 .cs16 .cf32), or rtlsdr[:serial]",
    )
    parser.add_argument(
        "--channel", action="append", default=[], metavar="TEXT", help="adds a channel; may be repeated"
    )
    parser.add_argument("--out", metavar="DIR", help="folder for audio and summary.json; made if it is not there")
    parser.add_argument(
        "--log", metavar="DIR", help="folder of the logbook, for channels with a log key; OUT/log if left out"
    )
    parser.add_argument(
        "--pace",
        choices=("live", "fast"),
        help="recordings at their own pace, or as fast as it goes; fast unless listened to",
    )
    parser.add_argument("--quiet", action="store_true", help="show nothing while receiving")
    add_listen_arguments(parser)
    add_source_arguments(parser)


def run(arguments: argparse.Namespace) -> int:
    """Receives; returns the exit status."""
    from pathlib import Path

    from rxchain.chain.channel_settings import channel_from_text
    from rxchain.chain.station import LogRules, load_station
    from rxchain.cli.reception import Request, receive

    channels = tuple(channel_from_text(text) for text in arguments.channel)
    options = given_options(vars(arguments))
    source, station_log = arguments.source, None
    if source.lower().endswith(".toml"):
        station = load_station(Path(source))
        source, options = station.source, station.source_options | options
        channels, station_log = station.channels + channels, station.log
    out = Path(arguments.out) if arguments.out else None
    log = LogRules(Path(arguments.log)) if arguments.log else station_log
    listen = listen_of(arguments)
    live_pace = arguments.pace == "live"
    request = Request(source, options, channels, out, log, live_pace=live_pace, quiet=arguments.quiet, listen=listen)
    return receive(request).exit_status
