"""What a follower is told to do, and how each kind of reference is best followed.

The numbers of a :class:`Recipe` were measured on recorded voices in noise, drift and simulated fading; the benchmark
``benchmarks/carrier_tracking.py`` measures them again.
"""

from __future__ import annotations

from dataclasses import dataclass

from rxchain.carrier.track import Follow
from rxchain.errors import SettingError


@dataclass(frozen=True, slots=True)
class FollowerSettings:
    """How to follow the carriers of a group of channels.

    follow : what to hold on to; all channels of a group hold on to the same kind of thing.
    search_hz : the carrier is searched within this distance of the nominal frequency.
    live : less delay (under 75 ms instead of 150 ms), at the price of more phase noise and poorer fades.
    message_hz : band of the message about the carrier. It is filtered out before a power of the signal is taken, and
        tells which line beside a pilot belongs to the message.

    A :class:`~rxchain.errors.SettingError` names what breaks a rule.
    """

    follow: Follow
    search_hz: float = 500.0
    live: bool = False
    message_hz: tuple[float, float] = (300.0, 2700.0)

    def __post_init__(self) -> None:
        if not 0.0 < self.search_hz < float("inf"):
            raise SettingError("search_hz", self.search_hz, "the search reaches some way to each side", "use 500.0")
        low_hz, high_hz = self.message_hz
        if not 0.0 <= low_hz < high_hz:
            raise SettingError("message_hz", self.message_hz, "edges are 0 or more, the lower first", "use (300, 2700)")


@dataclass(frozen=True, slots=True)
class Recipe:
    """The constants of one kind of following.

    power : the line followed is that of the signal's ``power``-th power.
    span_hops : length of a block sum's window. Two hops reach +-94 Hz; four keep out a message that begins at 100 Hz.
    half_lengths : the smoother's windows, (future, past), hops; the future is cut to the look-ahead there is.
    stacks : (spectra averaged, contrast asked for in dB): the longer the average, the less is asked for.
    stack_every : averages are taken at every so manieth spectrum.
    quick_db : a line this far over the mean power about it in two spectra running is taken at once; None: never.
    drift_hz_s : steepest drift of the carrier searched for.
    confirm_s : a line taken up is dropped unless confirmed within this time.
    hold_weight : weight of the phase held from before, in noise amplitudes of the smoother.
    hold_s : how slowly the noise behind ``hold_weight`` may fall, seconds for a factor e.
    burst_ratio : a block sum this far over the line's strength, in amplitude, is a burst. A voice's loudest moments have ten
        times its mean power, which is what the line of a square is made of.
    fast_fading : give the frequency to the lag product where the measured Doppler spread asks for it.
    """

    power: int
    span_hops: int
    half_lengths: tuple[tuple[int, int], ...]
    stacks: tuple[tuple[int, float], ...]
    stack_every: int
    quick_db: float | None
    drift_hz_s: float
    confirm_s: float
    hold_weight: float
    hold_s: float
    fast_fading: bool
    burst_ratio: float


_LONG = ((5, 5), (11, 11), (24, 24), (24, 72), (24, 200))

RECIPES: dict[Follow, Recipe] = {
    Follow.CARRIER: Recipe(
        power=1,
        span_hops=2,
        half_lengths=((2, 2), *_LONG),
        stacks=((12, 8.5),),
        stack_every=2,
        quick_db=15.5,
        drift_hz_s=20.0,
        confirm_s=0.8,
        hold_weight=1.5,
        hold_s=1.0,
        fast_fading=True,
        burst_ratio=10.0,
    ),
    # A voice's harmonics can stand still for half a second, hence the higher contrast for the shorter average.
    Follow.PILOT: Recipe(
        power=1,
        span_hops=4,
        half_lengths=_LONG,
        stacks=((8, 12.0), (16, 8.5)),
        stack_every=2,
        quick_db=None,
        drift_hz_s=20.0,
        confirm_s=0.8,
        hold_weight=1.5,
        hold_s=1.0,
        fast_fading=True,
        burst_ratio=10.0,
    ),
    # The line comes and goes with the voice: long averages, patience before it is dropped, a firm hold in pauses.
    Follow.SQUARE: Recipe(
        power=2,
        span_hops=2,
        half_lengths=((2, 2), *_LONG),
        stacks=((24, 8.0),),
        stack_every=4,
        quick_db=None,
        drift_hz_s=20.0,
        confirm_s=2.5,
        hold_weight=4.0,
        hold_s=6.0,
        fast_fading=False,
        burst_ratio=30.0,
    ),
    # The messages are noise to this line: only the long windows average enough of them.
    Follow.FOURTH_POWER: Recipe(
        power=4,
        span_hops=2,
        half_lengths=_LONG[2:],
        stacks=((32, 7.5),),
        stack_every=4,
        quick_db=None,
        drift_hz_s=5.0,
        confirm_s=2.5,
        hold_weight=4.0,
        hold_s=6.0,
        fast_fading=False,
        burst_ratio=30.0,
    ),
}
