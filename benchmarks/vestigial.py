"""Vestigial sideband: what the best weighting of the two copies gains over passing the emission flat, through the receiver.

Run: ``python benchmarks/vestigial.py [--quick]``. Goal: coherent detection, for each way of stating the slope, within 0.3 dB of a
receiver that knows everything, and better than plain division by the copies' sum.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from knowing_receiver import audio_snr_db, known_messages, upright
from results_file import ResultsFile
from scenes import run_blocks

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.emissions import EMISSIONS
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block
from rxchain.synthesis.messages import Message
from rxchain.synthesis.modulation import Modulation
from rxchain.synthesis.render import StationTruth, render
from rxchain.synthesis.scene import Scene, Station

RATE_HZ, SNR_DB, STEADY_S, GOAL_DB = 96_000.0, 20.0, (4.0, 11.5), 0.3


def plain(iq: np.ndarray, scene: Scene, truth: StationTruth) -> np.ndarray:
    """The emission's whole span passed flat and divided by what its two copies sum to; the empty side left out."""
    station, rate_hz = truth.station, truth.message_rate_hz
    spectrum = np.fft.fft(upright(iq, scene, station, rate_hz))
    f = np.fft.fftfreq(len(spectrum), 1 / rate_hz) * int(station.emission.side)
    low_hz, high_hz = station.audio_hz
    inside = (np.abs(f) >= low_hz) & (np.abs(f) <= high_hz) & (f >= -station.how.vestige_hz)
    flat = station.how.vestige_is_flat
    copies = 1.0 + ((np.abs(f) <= station.how.vestige_hz) if flat else 0.0)
    return np.real(np.fft.ifft(spectrum * inside / copies))


def one(name: str, audio_hz: tuple[float, float], vestige_hz: float, flat: bool, folder: Path) -> list[object]:
    """The row of one case."""
    how = Modulation(0.8, vestige_hz=vestige_hz, vestige_is_flat=flat)
    station = Station("v", EMISSIONS[name], 1.005e6, -20.0, (Message("noise"),), audio_hz, how, offset_hz=-11.0)
    scene = Scene(RATE_HZ, 1e6, 12.0, (station,), seed=4, noise_dbfs_hz=-90.0)
    raised_db = SNR_DB - render(scene).truths[0].snr_db[0]
    scene = replace(scene, stations=(replace(station, level_dbfs=-20.0 + raised_db),))
    rendered = render(scene)
    truth = rendered.truths[0]
    stated = f"slope={'received' if flat else 'sent'} vestige={vestige_hz:g}Hz"
    ways = {"": stated}
    if not flat:
        path = folder / "response.txt"
        path.write_text(f"{-vestige_hz} 0.0\n{vestige_hz} 1.0\n", encoding="utf-8")
        ways["response"] = f"transmit_response={path} vestige={vestige_hz:g}Hz"
    text = f"1005kHz {name} audio={audio_hz[0]:g}-{audio_hz[1]:g}Hz detector=coherent agc=off squelch=off"
    figures = []
    for way in ways.values():
        info = SourceInfo("recording", "vestigial", RATE_HZ, 1e6, None, len(rendered.iq))
        receiver = Receiver(info, (channel_from_text(f"{text} name=v {way}"),))
        audio = run_blocks(receiver, [Block(rendered.iq, 0)])[0]
        figures.append(audio_snr_db(audio[0], receiver.audio_rate_hz(0), truth, 0, STEADY_S))
    best = audio_snr_db(known_messages(rendered.iq, scene, truth)[0], truth.message_rate_hz, truth, 0, STEADY_S)
    simple = audio_snr_db(plain(rendered.iq, scene, truth), truth.message_rate_hz, truth, 0, STEADY_S)
    lost = [best - figure for figure in figures]
    return [
        name, f"{audio_hz[0]:g}-{audio_hz[1]:g}", f"{vestige_hz:g}", "received" if flat else "sent",
        f"{best:.2f}", " / ".join(f"{x:.2f}" if x <= GOAL_DB else f"**{x:.2f}**" for x in lost),
        f"{figures[0] - simple:+.2f}",
    ]  # fmt: skip


def main() -> None:
    """Prints the table."""
    import tempfile

    results = ResultsFile("vestigial", "Vestigial sideband")
    results.text(
        f"Noise messages at {SNR_DB:g} dB, 11 Hz off-tune, through the whole receiver with `detector=coherent`. Loss against the "
        "knowing receiver, for the slope as stated, and after the stroke with `transmit_response=` for the "
        f"same slope; goal {GOAL_DB:g} dB. Gain over passing the span flat and dividing by the copies' sum, on the same "
        "samples with filters that are knives; a slope sent whole has equal copies, where plain division is the best weighting."
    )
    results.table(["emission", "audio, Hz", "slope ±, Hz", "slope", "knowing, dB", "lost, dB", "gain over plain, dB"])
    cases = [
        (name, audio_hz, vestige_hz, flat)
        for name in ("C3E-USB", "VSB-SC-LSB")
        for audio_hz, vestige_hz in (
            ((100.0, 4_500.0), 1_125.0),
            ((300.0, 2_700.0), 675.0),
            ((300.0, 2_700.0), 1_350.0),
        )
        for flat in (False, True)
    ]
    with tempfile.TemporaryDirectory() as folder:
        for case in cases[:2] if results.quick else cases:
            results.row(*one(*case, Path(folder)))
    results.close()
    results.write()


if __name__ == "__main__":
    main()
