"""Why a channel is heard through the detector it is heard through, in one plain line."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from rxchain.carrier.track import Lock

_LEAD_DB = 0.5  # less is no lead worth naming
_WEAK_DB_HZ = 55.0  # carriers below this are named as weak where the envelope suffers
_OVER = 0.02  # of the carrier: real parts so far below 0 count as over-modulation
_SURE = 2.0  # times what the imaginary part does: noise and echoes go either way, over-modulation does not


@dataclass(frozen=True, slots=True)
class Standing:
    """How the candidates of one channel stand.

    is_sided : whether the emission has one whole sideband only. sinad_db : predicted, of each candidate; empty where none
    has been made. noise : of each detector's output, any unit. deepest, sideways : lowest real part and largest imaginary
    part of the last seconds, over the carrier.
    """

    is_sided: bool
    chosen: str
    lock: Lock
    sinad_db: Mapping[str, float]
    noise: Mapping[str, float]
    carrier_to_noise_density: float
    deepest: float
    sideways: float

    @property
    def lead_db(self) -> float:
        """The chosen detector's, over the best of the others."""
        return self.sinad_db[self.chosen] - max(db for name, db in self.sinad_db.items() if name != self.chosen)


def in_words(standing: Standing) -> str:
    """The reason; every figure in it is of the last seconds."""
    if standing.lock is Lock.NONE:
        return "no carrier followed: " + (
            "the envelope needs none" if standing.chosen == "envelope" else "beat against the nominal frequency"
        )
    if standing.lock is Lock.HELD:
        return "the carrier is in a fade: carried on as before"
    carrier = f"carrier locked at {10.0 * np.log10(max(standing.carrier_to_noise_density, 1.0)):.0f} dB-Hz"
    if not standing.sinad_db:
        return f"{carrier}: {standing.chosen} to begin with"
    if standing.lead_db < -_LEAD_DB:
        return (
            f"{standing.chosen} as before: another has been {-standing.lead_db:.1f} dB ahead, not for long enough yet"
        )
    match standing.chosen:
        case "upper" | "lower":
            return _one_side(standing)
        case "envelope":
            if standing.lead_db < _LEAD_DB:
                return "envelope as before: no other is clearly ahead"
            return f"the carrier's phase is unsteady: the envelope is {standing.lead_db:.1f} dB ahead"
    return f"{carrier}: {_coherent(standing)}"


def _one_side(standing: Standing) -> str:
    if standing.lead_db < _LEAD_DB:
        return f"the {standing.chosen} sideband alone as before: nothing else is clearly ahead"
    other = "lower" if standing.chosen == "upper" else "upper"
    excess_db = 10.0 * np.log10(standing.noise[other] / standing.noise[standing.chosen])
    why = (
        f"the {other} one is disturbed {excess_db:.1f} dB more"
        if excess_db > _LEAD_DB
        else f"the {other} one has faded"
    )
    return f"the {standing.chosen} sideband alone is {standing.lead_db:.1f} dB ahead: {why}"


def _coherent(standing: Standing) -> str:
    rivals = {name: db for name, db in standing.sinad_db.items() if name != "coherent"}
    rival = max(rivals, key=rivals.__getitem__)
    if max(standing.sinad_db.values()) < 0.0:
        return "little to hear but noise, of which coherent adds least"
    if standing.lead_db < _LEAD_DB:
        name = "the envelope" if rival == "envelope" else f"the {rival} sideband alone"
        return f"{name} would do as well"
    if rival != "envelope":
        return f"both sidebands are {standing.lead_db:.1f} dB ahead of the {rival} one alone"
    cost = f"would cost {standing.lead_db:.1f} dB"
    if standing.is_sided:
        return f"sidebands are unequal, the envelope's distortion {cost}"
    if standing.deepest < -_OVER and -standing.deepest > _SURE * standing.sideways:
        return f"over-modulated to {100 * (1 - standing.deepest):.0f} %, the folded envelope {cost}"
    if 10.0 * np.log10(max(standing.carrier_to_noise_density, 1.0)) < _WEAK_DB_HZ:
        return f"so weak a carrier, the envelope's noise {cost}"
    return f"the envelope's distortion {cost}"
