"""The picker against each detector by hand: SINAD of the audio against the known message, in scenes where each one wins.

Run: ``python benchmarks/picker_scenes.py [seed [name]]``. Thirty seconds of a voice, from ``../shared/recordings`` beside the
repository; where it is absent, noise with the syllables of speech. Scored from 8 s on.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from contests import HIGH_HZ, LOW_HZ, RATE_HZ, contests, hear, speech_like

from rxchain.synthesis.messages import Message, make_message

SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
VOICES = ("woman-30s-8k.wav", "man-7s-16k.wav", "man-5s-16k.wav", "man-6s-16k.wav")
SECONDS = 30.0


def voice(n: int, seed: int) -> np.ndarray:
    path = SPEECH / VOICES[(seed - 1) % len(VOICES)]
    return make_message(Message("sound", path=path), n, RATE_HZ, (LOW_HZ, HIGH_HZ), seed)


def main() -> None:
    """Prints the table."""
    seed = int(sys.argv[1]) if len(sys.argv) > 1 else 1
    wanted = sys.argv[2] if len(sys.argv) > 2 else ""
    print(
        "| scene | coherent | envelope | upper | lower | auto | loss, dB | share of the best | changes | last reason |"
    )
    print("|---|---|---|---|---|---|---|---|---|---|")
    for contest in contests(voice if SPEECH.is_dir() else speech_like, SECONDS, seed):
        if wanted not in contest.name:
            continue
        outcome = hear(contest)
        names = ("coherent", "envelope", "upper", "lower")
        by_hand = " | ".join(f"{outcome.by_hand_db[k]:.1f}" if k in outcome.by_hand_db else "–" for k in names)
        share = np.mean([name == outcome.best for name in outcome.choices])
        print(
            f"| {contest.name} | {by_hand} | {outcome.auto_db:.1f} | {outcome.loss_db:.2f} | {100 * share:.0f} % "
            f"{outcome.best} | {outcome.changes} | {outcome.reason} |",
            flush=True,
        )


if __name__ == "__main__":
    main()
