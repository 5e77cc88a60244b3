"""Every emission, clean and at 20 dB: audio SNR against the known message, and the loss against theory.

Run: ``python benchmarks/emissions.py``. Theory: check-values 5.2 (Haykin, ch. 2; Proakis and Salehi, ch. 5): double
sideband N0 B in the message's units, single sideband N0 B / 2; vestigial by the best weighting of its two copies. Messages
are Gaussian noise that fills the band; emissions that can be followed are 37 Hz off-tune.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from scenes import one_of_each, receive, resampled
from signals import fit, hilbert

from rxchain.synthesis.render import render
from rxchain.synthesis.scene import Scene

RATE_HZ, SECONDS, NOISE_DBFS_HZ, REFERENCE_DB = 288_000.0, 16.0, -100.0, 20.0
SETTLED_S = 4.0


def audio_snr_db(audio, rate_hz, truth, k):
    """SNR of a message against the truth, and the truth's own power, over the settled part."""
    message = resampled(truth.messages[k], truth.message_rate_hz, audio.shape[1], rate_hz)
    n = min(len(message), audio.shape[1])
    steady = slice(int(SETTLED_S * rate_hz), n - int(0.3 * rate_hz))
    known = [message[:n]]
    family = truth.station.emission.family
    if family == "J3E":
        known.append(hilbert(message[:n]))
    if family == "A1A":
        t = np.arange(n) / rate_hz
        known = [message[:n] * np.cos(2 * np.pi * 700 * t), message[:n] * np.sin(2 * np.pi * 700 * t)]
    _, left_db = fit(audio[k, :n][steady].astype(float), *(one[steady] for one in known))
    return -left_db, float(np.mean(message[:n][steady] ** 2))


def at_reference(stations):
    """The stations at the levels at which theory gives the reference SNR."""
    truths = render(Scene(RATE_HZ, 1e6, SECONDS, tuple(stations), noise_dbfs_hz=NOISE_DBFS_HZ)).truths
    return [
        replace(one, level_dbfs=one.level_dbfs + REFERENCE_DB - float(np.mean(truth.snr_db)))
        for one, truth in zip(stations, truths, strict=True)
    ]


def main() -> None:
    """Prints the table."""
    stations = one_of_each(offset_hz=-37.0)
    rendered, receiver, audio = receive(Scene(RATE_HZ, 1e6, SECONDS, tuple(stations), seed=3))
    clean = [
        [audio_snr_db(audio[p], receiver.audio_rate_hz(p), truth, k)[0] for k in range(len(audio[p]))]
        for p, truth in enumerate(rendered.truths)
    ]
    scene = Scene(RATE_HZ, 1e6, SECONDS, tuple(at_reference(stations)), seed=3, noise_dbfs_hz=NOISE_DBFS_HZ)
    rendered, receiver, audio = receive(scene)
    print("| emission | detector | clean, dB | theory at 20 dB | measured | loss, dB | meter's SNR |")
    print("|---|---|---|---|---|---|---|")
    for place, truth in enumerate(rendered.truths):
        group, row = receiver.group_of(place)
        reading = receiver.figures(place).snr_db
        meter = "–" if reading is None else f"{reading.value:.2f} ± {reading.uncertainty:.2f}"
        for k, name in enumerate(truth.station.emission.messages):
            measured_db, power = audio_snr_db(audio[place], receiver.audio_rate_hz(place), truth, k)
            whole_power = np.mean(truth.messages[k] ** 2)
            theory_db = truth.snr_db[k] + 10 * np.log10(power / whole_power)
            label = truth.station.emission.name + (f" ({name})" if len(audio[place]) > 1 else "")
            print(
                f"| {label} | {group.detector(row)[0]} | {clean[place][k]:.1f} | {theory_db:.2f} | {measured_db:.2f} "
                f"| {theory_db - measured_db:.2f} | {meter} |"
            )


if __name__ == "__main__":
    main()
