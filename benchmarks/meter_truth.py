"""Meters against the truth: error, stated uncertainty and how often the one covers the other.

Run: ``python benchmarks/meter_truth.py [--quick | --all] [FOLDER]``, FOLDER with recordings of voices (``speech/*.wav`` in
it; ``../shared/recordings`` beside the repository if it is not given). Goals: SNR within 0.5 dB from 0 to 40 dB; depth within 1
point at 30 dB C/N over 10 s of voice; 58 to 78 % of errors within the stated deviation, over at least 200 readings. The
channels are turned by the truth; a follower's own errors are added where a table says so.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
import results_file
from known_channels import Known, known, noise, steady_jitter, tone, values, voices

from rxchain.meters.figures import Figures
from rxchain.synthesis.modulation import Modulation

ROOT = Path(__file__).resolve().parents[1]
CHANNELS, SEED = 16, 7
READINGS = 208  # of each figure in the table of coverage
RESULTS = results_file.ResultsFile("meters", "Meter truth: error and stated uncertainty")
EMISSIONS = ("A3E", "DSB-SC", "J3E-USB", "R3E-LSB", "H3E-USB", "B8E", "C3E-USB", "VSB-SC-LSB", "QAM", "AM-STEREO")


def cell(figures: Sequence[Figures], name: str, truth: np.ndarray, digits: int = 2) -> str:
    """Mean error, rms error, mean stated deviation, coverage."""
    value, deviation = values(figures, name)
    told = np.isfinite(value)
    if not told.any():
        return "none"
    error, stated = (value - truth)[told], deviation[told]
    text = " / ".join(f"{x:.{digits}f}" for x in (error.mean(), np.sqrt(np.mean(error**2)), stated.mean()))
    text += f" / {100 * np.mean(np.abs(error) <= stated):.0f}"
    return text if told.all() else f"{text} ({told.sum()} of {len(told)})"


def table(title: str, head: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """One markdown table."""
    RESULTS.text(f"## {title}")
    RESULTS.table(head)
    for row in rows:
        RESULTS.row(*row)
    RESULTS.close()


def snr(makers: dict[str, object], seconds: float) -> None:
    """Every emission at five strengths."""
    strengths = (0.0, 10.0, 20.0, 30.0, 40.0)
    for word, make in makers.items():
        rows = []
        for name in EMISSIONS:
            one = [known(name, make, seconds, CHANNELS, SEED, snr_db=s) for s in strengths]
            rows.append([name, *(cell(k.figures(), "snr_db", k.snr_db) for k in one)])
        table(f"SNR, dB: {word}, {seconds:g} s", ["emission", *(f"{s:g} dB" for s in strengths)], rows)


def snr_through_shaking(seconds: float) -> None:
    """What an imperfect follower does to double sideband."""
    strengths = (10.0, 20.0, 30.0, 40.0)
    rows = []
    for name in ("A3E", "DSB-SC", "QAM"):
        for degrees, width_hz in ((0.2, 3.0), (1.0, 3.0), (3.0, 3.0)):
            turn = steady_jitter(np.radians(degrees), width_hz)
            one = [known(name, noise, seconds, CHANNELS, SEED, snr_db=s, turn_rad=turn) for s in strengths]
            texts = [cell(k.figures(), "snr_db", k.snr_db) for k in one]
            rows.append([name, f"{degrees:g} deg, {width_hz:g} Hz", *texts])
    head = ["emission", "follower's phase", *(f"{s:g} dB" for s in strengths)]
    table(f"SNR, dB: noise message, follower not perfect, {seconds:g} s", head, rows)


def depth(makers: dict[str, object]) -> None:
    """Programme and tones; the noise is told by the carrier's power over the noise in 9 kHz."""
    strengths = (40.0, 30.0, 20.0, 15.0, 10.0)
    rows = []
    for word, make in makers.items():
        for seconds, true_depth in ((1.1, 0.8), (10.0, 0.8), (10.0, 0.3), (10.0, 1.3)):
            texts = []
            for s in strengths:
                density_db = -s - 10 * np.log10(9_000.0)
                how = Modulation(true_depth)
                k = known("A3E", make, seconds, CHANNELS, SEED, noise_density_db=density_db, how=how)
                texts.append(cell(k.figures(), "depth_percent", (k.rise_percent + k.fall_percent) / 2))
            rows.append([f"{word}, {true_depth:g}, {seconds:g} s", *texts])
    head = ["message, depth, time", *(f"C/N {s:g} dB" for s in strengths)]
    table("Depth of A3E, percent: half the peak-to-peak", head, rows)
    rows = []
    for name in ("H3E-USB", "C3E-USB", "AM-STEREO"):
        texts = []
        for s in strengths[:3]:
            k = known(name, noise, 10.0, CHANNELS, SEED, noise_density_db=-s - 10 * np.log10(9_000.0))
            texts.append(cell(k.figures(), "depth_percent", (k.rise_percent + k.fall_percent) / 2))
        rows.append([name, *texts])
    table(
        "Depth of one-sided emissions, noise message, 10 s",
        ["emission", *(f"C/N {s:g} dB" for s in strengths[:3])],
        rows,
    )


def carrier(makers: dict[str, object]) -> None:
    """Offset, strength, efficiency and level."""
    rows = []
    for seconds in (1.1, 10.0):
        for strength in (30.0, 40.0, 55.0, 75.0):
            for wander in (0.0, 0.1, 1.0):
                k = known(
                    "A3E", next(iter(makers.values())), seconds, 2 * CHANNELS, SEED,
                    noise_density_db=-strength, offset_hz=-3.7, wander_rad2_per_s=wander,
                )  # fmt: skip
                figures = k.figures()
                rows.append(
                    [
                        f"{strength:g}, {wander:g}, {seconds:g}",
                        cell(figures, "carrier_offset_hz", k.offset_hz, 5),
                        cell(figures, "carrier_to_noise_density_dbhz", k.carrier_to_noise_density_dbhz),
                        cell(figures, "power_efficiency_percent", k.efficiency_percent, 3),
                        cell(figures, "level_dbfs", k.level_dbfs, 3),
                    ]
                )
    head = ["C/N0 dB-Hz, wander rad2/s, time s", "offset, Hz", "C/N0, dB", "efficiency, %", "level, dB"]
    table("Carrier of A3E", head, rows)
    rows = []
    for name in ("R3E-LSB", "H3E-USB", "C3E-USB", "B8E", "QAM"):
        k = known(name, next(iter(makers.values())), 10.0, 2 * CHANNELS, SEED, snr_db=20.0, offset_hz=1.3)
        figures = k.figures()
        rows.append(
            [
                name,
                cell(figures, "carrier_offset_hz", k.offset_hz, 5),
                cell(figures, "carrier_to_noise_density_dbhz", k.carrier_to_noise_density_dbhz),
                cell(figures, "power_efficiency_percent", k.efficiency_percent, 3),
            ]
        )
    table("Carriers and pilots at 20 dB SNR, 10 s", ["emission", "offset, Hz", "C/N0, dB", "efficiency, %"], rows)


def coverage(make: object, seconds: float, readings: int) -> None:
    """Every figure of every emission, many readings each: does the stated deviation cover?"""
    figures = {
        "snr_db": "SNR, dB",
        "carrier_offset_hz": "offset, Hz",
        "carrier_to_noise_density_dbhz": "C/N0, dB",
        "depth_percent": "depth, points",
        "power_efficiency_percent": "efficiency, points",
    }
    rows = []
    for name in EMISSIONS:
        one = known(name, make, seconds, readings, SEED + 1, snr_db=20.0, offset_hz=-2.1)
        read = one.figures()
        truths = {
            "snr_db": one.snr_db,
            "carrier_offset_hz": one.offset_hz,
            "carrier_to_noise_density_dbhz": one.carrier_to_noise_density_dbhz,
            "depth_percent": (one.rise_percent + one.fall_percent) / 2,
            "power_efficiency_percent": one.efficiency_percent,
        }
        digits = {"carrier_offset_hz": 5}
        rows.append([name, *(cell(read, figure, truths[figure], digits.get(figure, 2)) for figure in figures)])
    table(f"Coverage: {readings} readings, {seconds:g} s each, SNR 20 dB", ["emission", *figures.values()], rows)


def nothing_sent(seconds: float) -> None:
    """Channels that hold noise alone."""
    rows = []
    for name in EMISSIONS:
        k = known(name, lambda n, *_: np.full(n, 1e-9), seconds, CHANNELS, SEED, noise_density_db=-40.0)
        value, deviation = values(_unlocked(k).figures(), "snr_db")
        told = np.isfinite(value)
        text = (
            "none"
            if not told.any()
            else f"{told.sum()} of {CHANNELS}: {np.nanmax(value):.1f} ± {np.nanmin(deviation):.1f}"
        )
        rows.append([name, text])
    table(f"Noise alone, never locked, {seconds:g} s: SNR told", ["emission", "channels that told a figure"], rows)


def _unlocked(k: Known) -> Known:
    k.turned.track.lock[:] = 0
    k.turned.iq[:] -= k.turned.iq.mean(axis=1, keepdims=True)
    return k


def main(folder: Path) -> None:
    """Prints every table."""
    makers: dict[str, object] = {"noise": noise}
    if folder.is_dir():
        makers = {"voice": voices(folder), **makers}
    else:
        print(f"No voices in {folder}: noise and tones alone.")
    RESULTS.text(
        "Channels turned by the truth. Cells: mean error / rms error / mean stated deviation / share of readings within one "
        "deviation in percent (68 is ideal, 58 to 78 the goal); `n of m` where some channels gave no figure."
    )
    make = next(iter(makers.values()))
    if RESULTS.quick:
        coverage(make, 3.0, CHANNELS)
        RESULTS.write()
        return
    coverage(make, 3.0, READINGS)
    snr(makers if "--all" in sys.argv else dict(list(makers.items())[:1]), 10.0)
    if "--all" in sys.argv:
        snr(dict(list(makers.items())[:1]), 3.0)
        snr_through_shaking(10.0)
        depth({**makers, "tone": tone})
        carrier(makers)
        nothing_sent(20.0)
    RESULTS.write()


if __name__ == "__main__":
    folders = [argument for argument in sys.argv[1:] if not argument.startswith("--")]
    main(Path(folders[0]) if folders else ROOT.parent / "shared" / "recordings")
