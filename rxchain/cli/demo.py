"""``rxchain demo``: receives the shipped scene, and says how close it came to the truth."""

from __future__ import annotations

import argparse
from typing import Any

from rxchain.cli.listen_options import add_listen_arguments, listen_of


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's arguments."""
    parser.add_argument("--out", metavar="DIR", help="folder for audio and summary.json; a temporary one if left out")
    parser.add_argument(
        "--pace", choices=("live", "fast"), help="at its own pace, or as fast as it goes; fast unless listened to"
    )
    add_listen_arguments(parser)
    parser.add_argument("--quiet", action="store_true", help="show nothing while receiving")


def run(arguments: argparse.Namespace) -> int:
    """Receives the scene and tells station by station what was heard; returns the exit status."""
    import json
    import tempfile
    from pathlib import Path

    from rxchain.chain.station import load_station
    from rxchain.cli.reception import Request, receive
    from rxchain.cli.shipped import shipped
    from rxchain.synthesis.capture import TRUTH_KEY

    station = load_station(shipped("configs/coast.toml"))
    meta = json.loads(Path(station.source).read_text(encoding="utf-8"))
    truths = {one[TRUTH_KEY]["name"]: one[TRUTH_KEY] for one in meta["annotations"] if TRUTH_KEY in one}
    out = Path(arguments.out) if arguments.out else Path(tempfile.mkdtemp(prefix="rxchain-demo-"))
    print("An invented coast on 96 kHz of medium wave, 24 seconds, a station of each kind.", flush=True)
    request = Request(
        station.source,
        {},
        station.channels,
        out,
        None,
        live_pace=arguments.pace == "live",
        quiet=arguments.quiet,
        listen=listen_of(arguments),
    )
    result = receive(request)
    receiver = result.receiver
    print("\nHeard, and how close it came (measured ± one standard deviation, truth in brackets):\n")
    for place, channel in enumerate(receiver.channels):
        group, row = receiver.group_of(place)
        detector, reason = group.detector(row)
        print(f"{channel.name}: {channel.emission.name} by the {detector} detector: {reason}")
        for line in _comparisons(receiver.figures(place), truths.get(channel.name, {})):
            print(f"    {line}")
    print(f"\nAudio and summary.json are in {out}")
    return result.exit_status


def _comparisons(figures: Any, truth: dict[str, Any]) -> list[str]:
    """Each figure that has a truth beside it."""
    import math

    from rxchain.dashboard.wording import with_uncertainty

    snrs = truth.get("snr_db") or []
    # Both messages have the same noise: their mean power over it is what the figure of two messages means.
    mean_db = 10 * math.log10(sum(10 ** (snr / 10) for snr in snrs) / len(snrs)) if snrs else None
    rows = (
        ("SNR", figures.snr_db, mean_db, "dB"),
        ("carrier offset", figures.carrier_offset_hz, truth.get("carrier_offset_hz"), "Hz"),
        ("depth", figures.depth_percent, truth.get("depth_percent"), "%"),
    )
    return [
        f"{name} {with_uncertainty(reading, unit)} ({true:.2f} {unit})"
        for name, reading, true, unit in rows
        if reading is not None and true is not None
    ]
