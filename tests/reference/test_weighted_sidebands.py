"""The weighted sum of both sidebands: what it must equal, and what it must gain."""

from __future__ import annotations

import numpy as np
import pytest
from signals import fit, hilbert, noise_message, through

from rxchain.chain.channel_settings import channel_from_text
from rxchain.chain.detector_set import DetectorSet
from rxchain.chain.grouping import kind_of
from rxchain.detectors.coherent import CoherentDetector
from rxchain.detectors.sidebands import both_sidebands, one_sideband
from rxchain.detectors.weighted_sidebands import WeightedSidebands
from rxchain.emissions import Side
from rxchain.tuning.plan import plan_bank

RATE_HZ, N = 12_000.0, 60_000
STEADY = slice(12_000, -2_000)
SIDES = np.stack([2 * one_sideband(side, 300.0, 2_700.0, RATE_HZ) for side in (Side.UPPER, Side.LOWER)])[None]
# Weights from a fifth of a second of a noise message shake by a few percent, and so does what both copies have apart.
ALIKE_DB = 0.1
SHAKING_DB = 0.3  # what shaking weights cost
FADED_DB = -12.0


def channel(upper: float, lower: float, density: float) -> tuple[np.ndarray, np.ndarray]:
    message = noise_message(N, RATE_HZ, 300.0, 2_700.0, 4)
    turned = hilbert(message)
    rng = np.random.default_rng(8)
    air = np.sqrt(density * RATE_HZ / 2) * (rng.standard_normal(N) + 1j * rng.standard_normal(N))
    sidebands = 0.5 * upper * (message + 1j * turned) + 0.5 * lower * (message - 1j * turned)
    return (1.0 + sidebands + air).astype(np.complex64)[None], message


def lost_db(stage: CoherentDetector, iq: np.ndarray, message: np.ndarray) -> float:
    return fit(through(stage, iq)[0, 0].astype(float)[STEADY], message[STEADY])[1]


def test_equal_sidebands_give_what_both_give() -> None:
    """Of two equal copies in equal noise the sum is the best there is (Brennan 1959)."""
    iq, message = channel(1.0, 1.0, 1e-6)
    both = CoherentDetector(both_sidebands(300.0, 2_700.0, RATE_HZ)[None, None], 1)
    assert lost_db(WeightedSidebands(SIDES, 1, RATE_HZ), iq, message) == pytest.approx(
        lost_db(both, iq, message), abs=ALIKE_DB
    )


@pytest.mark.parametrize("faded", [Side.UPPER, Side.LOWER])
def test_a_faded_sideband_is_left_out(faded: Side) -> None:
    """Copies 1 and a in equal noise: both give (1 + a)^2 / 2, weights by power (1 + a^3)^2 / (1 + a^4), by algebra."""
    weak = 10 ** (FADED_DB / 20)
    iq, message = channel(*((weak, 1.0) if faded is Side.UPPER else (1.0, weak)), 1e-5)
    both = CoherentDetector(both_sidebands(300.0, 2_700.0, RATE_HZ)[None, None], 1)
    gained_db = lost_db(both, iq, message) - lost_db(WeightedSidebands(SIDES, 1, RATE_HZ), iq, message)
    expected_db = 10 * np.log10(2 * (1 + weak**3) ** 2 / (1 + weak**4) / (1 + weak) ** 2)
    assert gained_db == pytest.approx(expected_db, abs=SHAKING_DB)


def test_the_channel_key_reaches_it_and_the_reason_says_so() -> None:
    plan = plan_bank(48_000.0)
    settings = channel_from_text("1MHz A3E sideband=weighted")
    detectors = DetectorSet(kind_of(settings, plan), [settings], RATE_HZ, 5_000.0)
    assert detectors.in_words(0, True) == ("coherent", "both sidebands, each weighted by its strength of the moment")
