"""The picker against each detector by hand: SINAD of the audio against the known message, in scenes where each one wins.

Run: ``python benchmarks/picker_scenes.py [--quick]``. Thirty seconds of a voice, from ``../shared/recordings`` beside the
repository; where it is absent, noise with the syllables of speech. Scored from 8 s on. Goals: ``auto`` within 0.3 dB of the
best by hand, no change of mind heard as a click, at most two changes a minute in steady conditions.
"""

from __future__ import annotations

import sys
from itertools import pairwise
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from contests import HIGH_HZ, LOW_HZ, RATE_HZ, contests, hear, speech_like
from results_file import ResultsFile

from rxchain.synthesis.messages import Message, make_message

SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
VOICES = ("woman-30s-8k.wav", "man-7s-16k.wav", "man-5s-16k.wav", "man-6s-16k.wav")
SECONDS = 30.0
GOAL_DB = 0.3
NAMES = ("coherent", "envelope", "upper", "lower")


def voice(n: int, seed: int) -> np.ndarray:
    path = SPEECH / VOICES[(seed - 1) % len(VOICES)]
    return make_message(Message("sound", path=path), n, RATE_HZ, (LOW_HZ, HIGH_HZ), seed)


def main() -> None:
    """Prints the table."""
    results = ResultsFile("picker", "The picker against each detector by hand")
    seeds = (1,) if results.quick else (3,)
    results.text(
        "SINAD, dB, of thirty seconds of a voice through each detector by hand and through the picker; goal: at most "
        f"{GOAL_DB:g} dB lost. A bold figure misses it. Voice and noise number {seeds[0]} of each scene."
    )
    results.table(["scene", *NAMES, "auto", "loss, dB", "share of the best", "changes", "last reason"])
    for seed in seeds:
        for k, contest in enumerate(contests(voice if SPEECH.is_dir() else speech_like, SECONDS, seed)):
            if results.quick and k % 6:
                continue
            outcome = hear(contest)
            by_hand = [f"{outcome.by_hand_db[name]:.1f}" if name in outcome.by_hand_db else "–" for name in NAMES]
            share = np.mean([name == outcome.best for name in outcome.choices])
            changes = sum(a != b for a, b in pairwise(outcome.choices))
            loss = f"{outcome.loss_db:.2f}"
            results.row(
                contest.name, *by_hand, f"{outcome.auto_db:.1f}", loss if outcome.loss_db <= GOAL_DB else f"**{loss}**",
                f"{100 * share:.0f} % {outcome.best}", changes, outcome.reason,
            )  # fmt: skip
    results.close()
    results.write()


if __name__ == "__main__":
    main()
