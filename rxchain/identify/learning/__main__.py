"""Learns the table and writes it where the program looks for it.

``python -m rxchain.identify.learning recordings/voices [WINDOWS_A_TEMPLATE [SEED]]`` takes some minutes on two cores.
"""

from __future__ import annotations

import os
import sys
from concurrent.futures import ProcessPoolExecutor
from functools import cache
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from rxchain.identify.evidence import _FILE, TEMPLATES, hats
from rxchain.identify.learning.fit import knots_of, weights_of
from rxchain.identify.learning.material import Material
from rxchain.identify.learning.windows import draw_conditions, draw_window
from rxchain.identify.measurements import measure
from rxchain.identify.short_time import RATE_HZ
from rxchain.identify.window import REACH_HZ, prepare_window
from rxchain.streams import Floats

SECONDS = (1.0, 2.0, 5.0)
_BATCH = 10


def learn(voices: Path, windows_a_template: int, seed: int) -> None:
    """Draws, measures, fits, writes."""
    jobs = [
        (str(voices), template, seed + 1_000 * place + batch)
        for place in range(len(TEMPLATES))
        for template in [TEMPLATES[place]]
        for batch in range(windows_a_template // _BATCH)
    ]
    with ProcessPoolExecutor(2) as pool:
        measured = list(pool.map(_measured, jobs, chunksize=4))
    labels = np.repeat([TEMPLATES.index(job[1]) for job in jobs], _BATCH)
    knots, weights = [], []
    for k, seconds in enumerate(SECONDS):
        values = np.concatenate([one[k] for one in measured])
        knots.append(knots_of(values))
        weights.append(weights_of(values, labels, knots[-1]))
        chances = np.exp(_scores(values, knots[-1], weights[-1]))
        print(f"{seconds:g} s: {100 * np.mean(np.argmax(chances, axis=1) == labels):.1f} % of what it learnt from")
    np.savez_compressed(
        _FILE,
        seconds=np.array(SECONDS),
        knots=np.array(knots, np.float32),
        weights=np.array(weights, np.float32),
    )


@cache
def _material(voices: str) -> Material:
    return Material(sorted(Path(voices).glob("*.flac")))


def _measured(job: tuple[str, str, int]) -> list[Floats]:
    """Measurements of a batch of windows of one template at each duration, (batch, measurements) each."""
    voices, template, seed = job
    rng, draw = np.random.default_rng(seed), _material(voices).draw
    windows = np.array(
        [draw_window(template, SECONDS[-1], draw_conditions(template, rng), draw, rng)[0] for _ in range(_BATCH)]
    )
    lengths = [round(seconds * RATE_HZ) for seconds in SECONDS]
    return [
        measure(np.array([prepare_window(one[:n], RATE_HZ, REACH_HZ).iq for one in windows])).values for n in lengths
    ]


def _scores(values: Floats, knots: Floats, weights: Floats) -> Floats:
    scores = hats(values, knots) @ weights.T
    return np.asarray(scores - scores.max(axis=1, keepdims=True))


if __name__ == "__main__":
    words = sys.argv[1:]
    learn(Path(words[0]), int(words[1]) if len(words) > 1 else 500, int(words[2]) if len(words) > 2 else 1)
