"""Channels whose emission is not given: what each seems to hold, and when to receive it as something else."""

from __future__ import annotations

from collections.abc import Sequence

from rxchain.chain.channel_settings import ChannelSettings
from rxchain.emissions import EMISSIONS, Emission
from rxchain.identify.naming import Guess
from rxchain.identify.running import RunningIdentifier
from rxchain.streams import ComplexBlock
from rxchain.tuning.plan import BankPlan

_HALF_WIDTH_HZ = 5_700.0
_BESIDE_HZ = 300.0
_GOOD_ENOUGH = 0.75  # to receive it so before the guess is firm


class AutoChannels:
    """Identifies channels while they are received.

    places : of the channels in the run. bins : width of the bank's channels that ``process`` takes.
    guesses : the latest of each place.
    """

    def __init__(self, places: Sequence[int], channels: Sequence[ChannelSettings], plan: BankPlan) -> None:
        self.places = tuple(places)
        self.bins = plan.narrowest(_HALF_WIDTH_HZ) or plan.widths[-1]
        self.guesses: dict[int, Guess] = {}
        limits_hz = [channel.audio_hz[1] + _BESIDE_HZ for channel in channels]
        self._running = RunningIdentifier([(-hz, hz) for hz in limits_hz], plan.rate_hz(self.bins))

    def process(self, iq: ComplexBlock) -> list[tuple[int, Emission]]:
        """Takes in the channels' samples, complex64, (channels, n); returns places whose emission is now known, and what
        it is.
        """
        known = []
        for guesses in self._running.process(iq):
            for place, guess in zip(self.places, guesses, strict=True):
                self.guesses[place] = guess
                if guess.is_emission and (guess.firm or guess.confidence >= _GOOD_ENOUGH):
                    known.append((place, EMISSIONS[guess.name]))
        return known
