"""What receiving costs, as a multiple of the bare forward transform of the same stream.

Run: ``python benchmarks/cost.py``. A stream of 2.4 MS/s, steady carriers in noise 8.33 kHz apart, everything on but the
files: tuning, following, detection with the picker, gain control, squelch, meters. Marginal CPU time of a second of
stream after two seconds of warming up; the bare transform is the bank's own (same library, same blocks), measured in the
same run.
"""

from __future__ import annotations

import os
import time

os.environ["OPENBLAS_NUM_THREADS"] = "1"

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.receiver import Receiver
from rxchain.sources.protocol import SourceInfo
from rxchain.streams import Block
from rxchain.tuning.channel_bank import HOPS_A_BATCH
from rxchain.tuning.plan import plan_bank

RATE_HZ, CENTRE_HZ, SPACING_HZ, SECONDS = 2.4e6, 118e6, 8_333.0, 2.0
CASES = [("A3E", 1), ("A3E", 50), ("A3E", 200), ("J3E-USB", 1), ("J3E-USB", 200)]


def main() -> None:
    """Prints the table."""
    np.empty(30 << 20, np.uint8)  # lifts the allocator's threshold, as a run does
    n = int(RATE_HZ * SECONDS)
    rng = np.random.default_rng(2)
    noise = (0.01 * rng.standard_normal((n, 2), np.float32)).view(np.complex64)[:, 0]
    bare_s = min(bare(noise) for _ in range(3)) / SECONDS
    print("| channels | CPU over the bare transform | share of one core at 2.4 MS/s |")
    print("|---|---|---|")
    print(f"| bare forward transform | 1.0 | {100 * bare_s:.1f} % |")
    t = np.arange(n) / RATE_HZ
    for emission, count in CASES:
        iq = noise.copy()
        offsets_hz = -1e6 + SPACING_HZ * np.arange(count)
        for offset_hz in offsets_hz:
            iq += (0.1 * np.exp(2j * np.pi * offset_hz * t)).astype(np.complex64)
        texts = [f"{CENTRE_HZ + offset_hz:.3f}Hz {emission}" for offset_hz in offsets_hz]
        info = SourceInfo("recording", "carriers", RATE_HZ, CENTRE_HZ, None, n)
        receiver = Receiver(info, tuple(channel_from_text(text) for text in texts))
        receiver.process(Block(iq, 0))
        started = time.process_time()
        for k, piece in enumerate(np.array_split(iq, 40)):
            receiver.process(Block(piece, n + k))
        cost_s = (time.process_time() - started) / SECONDS
        print(f"| {count} {emission} | {cost_s / bare_s:.1f} | {100 * cost_s:.0f} % |")


def bare(iq: np.ndarray) -> float:
    """CPU seconds of the forward transforms alone."""
    plan = plan_bank(RATE_HZ)
    windows = sliding_window_view(iq, plan.length)[:: plan.hop]
    started = time.process_time()
    for k in range(0, len(windows) - HOPS_A_BATCH, HOPS_A_BATCH):
        scipy.fft.fft(windows[k : k + HOPS_A_BATCH], axis=1)
    return time.process_time() - started


if __name__ == "__main__":
    main()
