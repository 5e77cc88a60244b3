"""Every emission in noise: what the receiver loses against one that knows everything, on the same noisy samples.

Run: ``python benchmarks/noise.py [--quick]``. Goals: issue of the receiver's limits, point 1: at 30, 20, 10 and 6 dB of audio
SNR at most 0.2, 0.3, 0.5 and 1 dB; clean at least 60 dB coherently.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from knowing_receiver import audio_snr_db, known_messages
from results_file import ResultsFile
from scenes import one_of_each, receive

from rxchain.synthesis.messages import Message
from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Scene, Station

SPEECH = Path(__file__).resolve().parents[2] / "shared" / "recordings" / "speech"
VOICES = ("woman-30s-8k.wav", "man-7s-16k.wav", "man-5s-16k.wav", "man-6s-16k.wav")
RATE_HZ, NOISE_DBFS_HZ, SETTLED_S, END_S = 288_000.0, -100.0, 4.0, 0.3
GOALS_DB = {30.0: 0.2, 20.0: 0.3, 10.0: 0.5, 6.0: 1.0}
CLEAN_GOAL_DB = 60.0


def with_voices(stations: list[Station], seed: int) -> list[Station]:
    """Each message another voice from another place; keyed text stays."""
    made, k = [], seed
    for one in stations:
        messages = []
        for message in one.messages:
            if message.kind == "noise":
                path = SPEECH / VOICES[k % len(VOICES)]
                message = Message("sound", path=path, start_s=(1.7 * k) % 4.0)
                k += 1
            messages.append(message)
        made.append(replace(one, messages=tuple(messages)))
    return made


def at_reference(stations: list[Station], scene: Scene, snr_db: float) -> list[Station]:
    """The stations at the levels at which theory gives that SNR (the mean of an emission's messages)."""
    truths = render(replace(scene, stations=tuple(stations), noise_dbfs_hz=NOISE_DBFS_HZ)).truths
    return [
        replace(one, level_dbfs=one.level_dbfs + snr_db - float(np.mean(truth.snr_db)))
        for one, truth in zip(stations, truths, strict=True)
    ]


def clean(stations: list[Station], scene: Scene) -> dict[tuple[str, int], float]:
    """Without noise: signal over whatever is not the message."""
    scene = replace(scene, stations=tuple(stations), noise_dbfs_hz=None)
    rendered, receiver, audio = receive(scene)
    steady = (SETTLED_S, scene.seconds - END_S)
    return {
        (one.station.emission.name, k): audio_snr_db(audio[p][k], receiver.audio_rate_hz(p), one, k, steady, False)
        for p, one in enumerate(rendered.truths)
        for k in range(len(audio[p]))
    }


def losses(stations: list[Station], scene: Scene, snr_db: float) -> dict[tuple[str, int], tuple[float, float, float]]:
    """What the knowing receiver gets, what is lost to it within the band, and with the slopes beside the band."""
    scene = replace(scene, stations=tuple(at_reference(stations, scene, snr_db)), noise_dbfs_hz=NOISE_DBFS_HZ)
    rendered, receiver, audio = receive(scene)
    steady = (SETTLED_S, scene.seconds - END_S)
    figures = {}
    for p, truth in enumerate(rendered.truths):
        best = known_messages(rendered.iq, scene, truth)
        for k in range(len(audio[p])):
            known_db = audio_snr_db(best[k], truth.message_rate_hz, truth, k, steady)
            in_band_db, whole_db = (
                audio_snr_db(audio[p][k], receiver.audio_rate_hz(p), truth, k, steady, in_band)
                for in_band in (True, False)
            )
            figures[truth.station.emission.name, k] = known_db, known_db - in_band_db, known_db - whole_db
    return figures


def main() -> None:
    """Prints the tables."""
    results = ResultsFile("noise", "Noise: loss against an all-knowing receiver")
    seconds, seeds = (7.0, (1,)) if results.quick else (16.0, (1, 2))
    levels_db = (20.0,) if results.quick else tuple(GOALS_DB)
    kinds = ("noise", "voice") if SPEECH.is_dir() else ("noise",)
    results.text(
        "All emissions side by side in one capture of 288 kS/s, through the whole receiver with `agc=off squelch=off` and "
        f"`detector=auto`; what can be followed is 37 Hz off-tune; scored from {SETTLED_S:g} s, worst of {len(seeds)} seeds. The "
        "knowing receiver (`tests/knowing_receiver.py`) has carrier, phase and slope, and filters that are knives. The loss is "
        "told within the message's band, as the summary defines `snr_db`; in brackets with all the audio holds, so with the "
        "noise on the slopes of the message filter, 80 Hz wide. Goals: "
        + ", ".join(f"{goal:g} dB at {level:g} dB" for level, goal in GOALS_DB.items())
        + f"; clean {CLEAN_GOAL_DB:g} dB. A bold figure misses its goal."
    )
    for kind in kinds:
        tables: list[dict] = []
        cleans: dict[tuple[str, int], float] = {}
        for seed in seeds:
            stations = one_of_each(offset_hz=-37.0)
            if kind == "voice":
                stations = with_voices(stations, 5 * seed)
            scene = Scene(RATE_HZ, 1e6, seconds, tuple(stations), seed=seed)
            for key, figure in clean(stations, scene).items():
                cleans[key] = min(figure, cleans.get(key, np.inf))
            tables.append({level: losses(stations, scene, level) for level in levels_db})
        results.text(f"## {kind.capitalize()} messages")
        results.table(["emission", "clean, dB", *(f"loss at {level:g} dB" for level in levels_db)])
        for (name, k), clean_db in cleans.items():
            cells = [_marked(f"{clean_db:.1f}", clean_db >= CLEAN_GOAL_DB)]
            for level in levels_db:
                lost = max(table[level][name, k][1] for table in tables)
                whole = max(table[level][name, k][2] for table in tables)
                cells.append(_marked(f"{lost:.2f}", lost <= GOALS_DB[level]) + f" ({whole:.2f})")
            messages = next(one for one in stations if one.emission.name == name).emission.messages
            results.row(name + (f" ({messages[k]})" if len(messages) > 1 else ""), *cells)
        results.close()
    results.write()


def _marked(text: str, good: bool) -> str:
    return text if good else f"**{text}**"


if __name__ == "__main__":
    main()
