"""``rxchain synthesize SCENE OUT``: makes a test capture with known truth from a scene file."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rxchain.synthesis.render import StationTruth


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The command's arguments."""
    parser.add_argument(
        "scene", metavar="SCENE", help="a scene file (.toml); rxchain/synthesis/scene.py shows its keys"
    )
    parser.add_argument("out", metavar="OUT", help="name of the SigMF recording to write")
    parser.add_argument(
        "--messages", action="store_true", help="also write each emission's true message(s) as OUT.truth/NAME.wav"
    )


def run(arguments: argparse.Namespace) -> int:
    """Makes the capture; returns the exit status."""
    from rxchain.synthesis.capture import write_capture
    from rxchain.synthesis.render import render
    from rxchain.synthesis.scene import load_scene

    scene = load_scene(Path(arguments.scene))
    rendered = render(scene)
    meta_path, clipped = write_capture(scene, rendered, Path(arguments.out))
    share = f", {clipped} of them clipped" if clipped else ""
    print(f"{meta_path}: {len(rendered.truths)} emissions, {scene.n_samples} samples{share}")
    if arguments.messages:
        _write_messages(meta_path.with_suffix(".truth"), rendered.truths)
    return 0


def _write_messages(folder: Path, truths: tuple[StationTruth, ...]) -> None:
    import soundfile

    from rxchain.errors import RequestError

    try:
        folder.mkdir(parents=True, exist_ok=True)
        for truth in truths:
            # A name may hold anything; what is written stays in the folder.
            path = folder / f"{truth.station.name.replace('/', '_').lstrip('.')}.wav"
            soundfile.write(path, truth.messages.T, round(truth.message_rate_hz), subtype="FLOAT")
    except (OSError, soundfile.LibsndfileError) as error:
        raise RequestError(f"out={folder}: cannot be written: {error}") from error
