"""How often emissions are named right: voices and music that took no part in learning, in noise, fading and worse.

Run: ``python benchmarks/identification.py [--quick] > benchmarks/results/identification.md``. The SNR is that of the whole
emission over the noise in its own bandwidth (a full carrier's sidebands lie 5 to 25 dB below it). A window counts as right
when family and side are. Paths: Recommendation ITU-R F.1487, mid-latitude.
"""

from __future__ import annotations

import argparse
import os
import time
from itertools import pairwise
from pathlib import Path

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import numpy as np

from rxchain.identify.evidence import TEMPLATES, evidence_table
from rxchain.identify.learning.material import Material
from rxchain.identify.learning.windows import Conditions, draw_window
from rxchain.identify.measurements import measure
from rxchain.identify.naming import CANT_TELL, FOREIGN, NOISE_ONLY, SURE, Guess, name_all
from rxchain.identify.running import RunningIdentifier
from rxchain.identify.short_time import RATE_HZ
from rxchain.identify.window import prepare_window
from rxchain.synthesis.propagation import F1487, Fading

SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
SNRS_DB = (30.0, 20.0, 15.0, 10.0, 5.0)
SECONDS = (1.0, 3.0, 5.0)
PATHS = {
    "clean": None,
    **{name: Fading(2, *F1487[f"mid-latitude {name}"]) for name in ("moderate", "disturbed")},
}
BINS = (0.0, 0.5, 0.7, 0.8, 0.9, 0.97, 1.0001)


def expected(template: str, side: int) -> str:
    family = template.split("/")[0]
    words = {"NOISE": NOISE_ONLY, "OTHER": FOREIGN}
    return words.get(family, family + {1: "-USB", -1: "-LSB", 0: ""}[side])


def guess(window: np.ndarray, seconds: float, reach_hz: float) -> Guess:
    prepared = prepare_window(window[: round(seconds * RATE_HZ)], RATE_HZ, reach_hz)
    return name_all(measure(prepared.iq[None]))[0]


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--runs", type=int, default=8)
    parser.add_argument("--reach", type=float, default=500.0)
    arguments = parser.parse_args()
    runs = 1 if arguments.quick else arguments.runs
    material = Material(sorted(SPEECH.glob("*.wav")) + sorted(SPEECH.glob("*.flac")))
    table = evidence_table()
    assert table.weights.shape[1] == len(TEMPLATES)
    rng = np.random.default_rng(20)
    outcomes: list[tuple[str, float, float, str, str, float]] = []  # path, snr, seconds, true, said, confidence
    for path, fading in PATHS.items():
        for snr_db in SNRS_DB:
            for template in TEMPLATES:
                for _ in range(runs):
                    conditions = Conditions(snr_db, fading, rng.uniform(-100.0, 100.0))
                    window, side = draw_window(template, 5.0, conditions, material.plain, rng)
                    for seconds in SECONDS:
                        one = guess(window, seconds, arguments.reach)
                        outcomes.append((path, snr_db, seconds, expected(template, side), one.name, one.confidence))
    print("# Naming emissions\n")
    print(f"{len(outcomes)} windows. Right, % (of these not told, wrong with a confidence above {SURE:g}):\n")
    print("| path | seconds | " + " | ".join(f"{snr:g} dB" for snr in SNRS_DB) + " |")
    print("|---|---" + "|---" * len(SNRS_DB) + "|")
    for path in PATHS:
        for seconds in SECONDS:
            cells = []
            for snr_db in SNRS_DB:
                these = [one for one in outcomes if one[:3] == (path, snr_db, seconds)]
                cells.append(rates(these))
            print(f"| {path} | {seconds:g} | " + " | ".join(cells) + " |")
    print_aims(outcomes)
    print("\n## Confusions, 5 s, all paths\n")
    for snr_db in SNRS_DB:
        wrong: dict[tuple[str, str], int] = {}
        for _, snr, seconds, true, said, _ in outcomes:
            if snr == snr_db and seconds == 5.0 and said != true:
                wrong[true, said] = wrong.get((true, said), 0) + 1
        listed = ", ".join(
            f"{true} as {said}: {count}" for (true, said), count in sorted(wrong.items(), key=lambda x: -x[1])
        )
        print(f"- {snr_db:g} dB: {listed or 'none'}")
    print("\n## Calibration: stated chance, windows, share right, %\n")
    print(
        "| stated | " + " | ".join(f"{seconds:g} s" for seconds in SECONDS) + " |\n|---" + "|---" * len(SECONDS) + "|"
    )
    for low, high in pairwise(BINS):
        cells = []
        for seconds in SECONDS:
            these = [one for one in outcomes if one[2] == seconds and low <= one[5] < high and one[4] != CANT_TELL]
            right = np.mean([one[3] == one[4] for one in these]) if these else np.nan
            cells.append(f"{len(these)}: {100 * right:.0f}")
        print(f"| {low:g}-{min(high, 1):g} | " + " | ".join(cells) + " |")
    print_weak(material, max(1, runs // 2))
    print_cost(material)


WEAK = ("offset 200 to 450 Hz", "drift 3 Hz/s", "impulses, 20 dB over it, 15 a second", "neighbour 6 dB under it from +4.2 kHz",
        "tones that stand for seconds as message", "0 dB")  # fmt: skip


def print_weak(material: Material, runs: int) -> None:
    """Conditions that were hard for the method; 5 s at 15 dB unless said, clean."""
    rng = np.random.default_rng(30)
    print("\n## Harder conditions, 5 s, 15 dB, clean, emissions of the family: right, not told, wrong and sure, %\n")
    print("| condition | windows | right | not told | wrong, confidence above 0.9 |\n|---|---|---|---|---|")
    for condition in WEAK:
        said = []
        for template in TEMPLATES:
            if template.startswith(("NOISE", "OTHER")):
                continue
            unplaced = template in ("J3E", "B8E/no pilot", "QAM/no pilot")
            if unplaced and condition.startswith(("offset", "drift")):
                continue  # nothing shows where they are
            for _ in range(runs):
                said.append(weak_window(condition, template, material, rng))
        n = len(said)
        right = sum(true == one.name for true, one in said) / n
        untold = sum(one.name == CANT_TELL for _, one in said) / n
        bold = sum(true != one.name and one.confidence > SURE and one.name != CANT_TELL for true, one in said) / n
        print(f"| {condition} | {n} | {100 * right:.0f} | {100 * untold:.0f} | {100 * bold:.1f} |")


def weak_window(condition: str, template: str, material: Material, rng: np.random.Generator) -> tuple[str, Guess]:
    far_hz = rng.uniform(200.0, 450.0) * rng.choice([-1, 1])
    conditions = Conditions(
        0.0 if condition == "0 dB" else 15.0,
        None,
        far_hz if condition.startswith("offset") else rng.uniform(-80.0, 80.0),
        rng.choice([-3.0, 3.0]) if condition.startswith("drift") else 0.0,
    )
    draw = material.signal if condition.startswith("tones") else material.plain
    window, side = draw_window(template, 5.0, conditions, draw, rng)
    t = np.arange(len(window)) / RATE_HZ
    power = np.sqrt(np.mean(np.abs(window) ** 2))
    if condition.startswith("impulses"):
        at = rng.integers(0, len(window) - 2, 75)
        window[at] += 10.0 * power * np.exp(2j * np.pi * rng.random(75))
    if condition.startswith("neighbour"):
        other, _ = draw_window("J3E", 5.0, Conditions(60.0), material.plain, rng)
        spectrum = np.fft.fft(other)
        upper = np.fft.ifft(np.where(np.fft.fftfreq(len(other)) > 0, spectrum, np.conj(spectrum[::-1])))
        upper /= np.sqrt(np.mean(np.abs(upper) ** 2))
        window = (window + 0.5 * power * upper * np.exp(2j * np.pi * 3_900.0 * t)).astype(np.complex64)
    return expected(template, side), guess(window, 5.0, 500.0)


def print_aims(outcomes: list[tuple[str, float, float, str, str, float]]) -> None:
    """Over the three paths together, beside what is aimed at."""
    print("\nOver the three paths together; one deviation of a share of so many windows in brackets:\n")
    print("| | measured, % | aim |\n|---|---|---|")
    for snr_db, aim in ((20.0, 97), (10.0, 92)):
        these = [one[3] == one[4] for one in outcomes if one[1:3] == (snr_db, 5.0)]
        print(f"| right at {snr_db:g} dB, 5 s | {share(these)} | {aim} or more |")
    late = [one for one in outcomes if one[2] >= 3.0]
    bold = [one[3] != one[4] and one[5] > SURE and one[4] != CANT_TELL for one in late]
    print(f"| wrong with a confidence above {SURE:g}, 3 s and 5 s | {share(bold)} | under 1 |")


def share(which: list[bool]) -> str:
    """Per cent, with one standard deviation of it."""
    p = float(np.mean(which))
    return f"{100 * p:.1f} ({100 * np.sqrt(p * (1 - p) / len(which)):.1f})"


def rates(outcomes: list[tuple[str, float, float, str, str, float]]) -> str:
    n = len(outcomes)
    right = sum(one[3] == one[4] for one in outcomes) / n
    untold = sum(one[4] == CANT_TELL for one in outcomes) / n
    bold = sum(one[3] != one[4] and one[5] > SURE and one[4] != CANT_TELL for one in outcomes) / n
    return f"{100 * right:.1f} ({100 * untold:.1f}, {100 * bold:.1f})"


def print_cost(material: Material, channels: int = 200) -> None:
    """CPU of the running guess, as ``receive`` makes it, until the names are firm and after."""
    rng = np.random.default_rng(3)
    drawn = np.array([draw_window(t, 9.0, Conditions(20.0), material.plain, rng)[0] for t in TEMPLATES[1:17]])
    windows = np.tile(drawn, (channels // len(drawn) + 1, 1))[:channels]
    running = RunningIdentifier([(-4_800.0, 4_800.0)] * channels, RATE_HZ)
    second = round(RATE_HZ)
    costs = []
    for k in range(9):
        started = time.process_time()
        guesses = running.process(windows[:, k * second : (k + 1) * second])[0]
        costs.append(1e3 * (time.process_time() - started) / channels)
    firm = sum(guess.firm for guess in guesses) / channels
    print(f"\nCost of the running guess at {channels} channels, a guess a second, ms of CPU a channel-second:")
    before, after = np.mean(costs[:5]), np.mean(costs[6:])
    print(
        f"seconds 1 to 5, until firm: {before:.1f} (aim 15); once firm: {after:.1f}; firm at 9 s: {100 * firm:.0f} %."
    )


if __name__ == "__main__":
    main()
