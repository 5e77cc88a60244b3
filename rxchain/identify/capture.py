"""Everything in a capture, found and named: once through to see where something is, once more to measure it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from rxchain.carrier.speech_aligner import SpeechAligner
from rxchain.identify.evidence import evidence_table
from rxchain.identify.measurements import LEAST_S, MOST_S, Measured, measure
from rxchain.identify.naming import SURE, Guess, name_one
from rxchain.identify.occupancy import Occupancy, OccupancyMap
from rxchain.identify.regions import Region, find_regions, joined_pairs
from rxchain.identify.window import REACH_HZ, prepare_window
from rxchain.sources.protocol import Source, SourceInfo
from rxchain.streams import ComplexBlock, Floats
from rxchain.tuning.channel_bank import ChannelBank
from rxchain.tuning.plan import plan_bank

_CHANNEL_HALF_HZ = 5_700.0
_MOST_WINDOWS = 6  # of the strongest, a region
_GUARD_HZ = 150.0
_SSB_LOW_HZ = 300.0  # a voice channel's lower edge: common practice
_SSB_WIDTH_HZ = (1_000.0, 3_800.0)
_SLOPE_NOTE = "no carrier shows: the side follows from the slope of the spectrum, the carrier from its edge"
_VOICE_NOTE = "no carrier shows: side and carrier are those with which the harmonics of the voice line up"
_FIRM_S = 3.0


@dataclass(frozen=True, slots=True)
class Identified:
    """An emission of a capture, or a region that could not be named.

    frequency_hz : of the carrier, sent or suppressed, or of the band's middle where there is none to speak of.
    low_hz, high_hz : occupied band, absolute. times_s : when it was on, seconds of the capture.
    """

    frequency_hz: float
    low_hz: float
    high_hz: float
    times_s: tuple[tuple[float, float], ...]
    level_dbfs: float
    guess: Guess


def identify_capture(open_capture: Callable[[], Source]) -> tuple[SourceInfo, list[Identified]]:
    """Finds and names the emissions of a capture that can be read twice, lowest frequency first."""
    source = open_capture()
    info = source.info
    seen = OccupancyMap(info.sample_rate_hz)
    try:
        for block in source.blocks():
            seen.process(block.iq)
    finally:
        source.close()
    occupancy = seen.occupancy()
    alone = find_regions(occupancy)
    pairs = joined_pairs(alone, occupancy)
    regions = alone + [both for _, both in pairs]
    if not regions:
        return info, []
    windows, rate_hz, middles_hz = _windows_of(open_capture(), regions)
    named: list[Identified | None] = []
    for k, (region, some, middle_hz) in enumerate(zip(regions, windows, middles_hz, strict=True)):
        # The middle of unlike sides lies well off that of their band.
        reach_hz = REACH_HZ if k < len(alone) else 0.5 * region.width_hz
        if some:
            guess, shift_hz = _named(some, rate_hz, region, float(middle_hz), reach_hz)
            named.append(_identified(info, occupancy, region, middle_hz + shift_hz, guess))
        else:
            named.append(None)
    return info, _chosen(
        named[: len(alone)], [(pair[0], one) for pair, one in zip(pairs, named[len(alone) :], strict=True)]
    )


def _chosen(alone: list[Identified | None], pairs: list[tuple[int, Identified | None]]) -> list[Identified]:
    """Two neighbours give way to what they are together where that is one emission about a common middle, surely."""
    for place, both in pairs:
        first, second = alone[place], alone[place + 1]
        if both is None or first is None or second is None:
            continue
        guess = both.guess
        if guess.reference == "square" and guess.is_emission and guess.confidence >= SURE:
            alone[place], alone[place + 1] = None, both
    return [one for one in alone if one is not None]


def _identified(info: SourceInfo, seen: Occupancy, region: Region, origin_hz: float, guess: Guess) -> Identified:
    level = max(region.level - _floor_in(seen.floor, seen.frequency_hz, region), 1e-30)
    return Identified(
        frequency_hz=info.centre_hz + origin_hz + guess.reference_hz,
        low_hz=info.centre_hz + region.low_hz,
        high_hz=info.centre_hz + region.high_hz,
        times_s=region.times_s,
        level_dbfs=float(10.0 * np.log10(level / _scale(len(seen.frequency_hz)))),
        guess=guess,
    )


def _windows_of(source: Source, regions: list[Region]) -> tuple[list[list[ComplexBlock]], float, Floats]:
    """The strongest windows of each region, their rate, and the middles of the channels they were cut from."""
    info = source.info
    plan = plan_bank(info.sample_rate_hz)
    bins = plan.narrowest(_CHANNEL_HALF_HZ) or plan.widths[-1]
    rate_hz = plan.rate_hz(bins)
    middles_hz = np.array(
        [one.line_hz if one.line_hz is not None else 0.5 * (one.low_hz + one.high_hz) for one in regions]
    )
    bank = ChannelBank(plan, [(bins, middles_hz)])
    size = round(MOST_S * rate_hz)
    keepers = [_Strongest() for _ in regions]
    held: ComplexBlock = np.zeros((len(regions), 0), np.complex64)
    try:
        for block in source.blocks():
            held = np.concatenate([held, bank.process(block.iq)[0]], axis=1)
            while held.shape[1] >= size:
                _keep(keepers, held[:, :size], regions, middles_hz, rate_hz)
                held = held[:, size // 2 :]
    finally:
        source.close()
    held = np.concatenate([held, bank.flush()[0]], axis=1)
    least = round(LEAST_S * rate_hz)
    if held.shape[1] >= least:
        _keep(keepers, held[:, :size], regions, middles_hz, rate_hz)
    return [keeper.windows() for keeper in keepers], rate_hz, middles_hz


class _Strongest:
    """The few windows of a region in which most of the time something was there, strongest first."""

    def __init__(self) -> None:
        self._kept: list[tuple[float, int, ComplexBlock]] = []
        self._number = 0

    def offer(self, power: float, window: ComplexBlock) -> None:
        self._number += 1
        self._kept.append((power * len(window), -self._number, window))
        self._kept.sort(key=lambda one: one[:2], reverse=True)
        del self._kept[_MOST_WINDOWS:]

    def windows(self) -> list[ComplexBlock]:
        return [window for _, _, window in self._kept]


def _keep(
    keepers: list[_Strongest], window: ComplexBlock, regions: list[Region], middles_hz: Floats, rate_hz: float
) -> None:
    spectra = np.fft.fft(window, axis=1)
    frequency_hz = np.fft.fftfreq(window.shape[1], 1.0 / rate_hz)
    for k, (keeper, region) in enumerate(zip(keepers, regions, strict=True)):
        inside = (frequency_hz >= region.low_hz - middles_hz[k]) & (frequency_hz <= region.high_hz - middles_hz[k])
        keeper.offer(float(np.mean(np.square(np.abs(spectra[k, inside])))), window[k].copy())


def _named(
    windows: list[ComplexBlock], rate_hz: float, region: Region, middle_hz: float, reach_hz: float
) -> tuple[Guess, float]:
    """The guess from all windows of a region together, and how far its reference's origin lies from the middle."""
    keep_hz = region.low_hz - middle_hz - _GUARD_HZ, region.high_hz - middle_hz + _GUARD_HZ
    prepared = [prepare_window(one, rate_hz, reach_hz, keep_hz) for one in windows]
    measured = [measure(one.iq[None]) for one in prepared]
    guess = _together(measured, [one.shift_hz for one in prepared])
    has_reference = guess.reference != "nominal"
    if has_reference or not _SSB_WIDTH_HZ[0] <= region.width_hz <= _SSB_WIDTH_HZ[1]:
        return guess, 0.0
    band_hz = region.low_hz - middle_hz, region.high_hz - middle_hz
    by_voice = _by_voice(windows, rate_hz, band_hz)
    side, carrier_hz = by_voice or _by_slope(windows, rate_hz, band_hz)
    turned = [_turned(one, rate_hz, carrier_hz) for one in windows]
    keep_hz = keep_hz[0] - carrier_hz, keep_hz[1] - carrier_hz
    sided = _together([measure(prepare_window(one, rate_hz, 0.0, keep_hz).iq[None], 60.0) for one in turned], None)
    if not sided.name.startswith("J3E") and sided.confidence < guess.confidence:
        return guess, 0.0
    notes = [note for note in sided.notes if "side" not in note]
    if sided.name.endswith(side):
        notes.append(_VOICE_NOTE if by_voice else _SLOPE_NOTE)
    return replace(sided, notes=tuple(notes), reference="voice" if by_voice else "edge"), carrier_hz


def _by_voice(windows: list[ComplexBlock], rate_hz: float, band_hz: tuple[float, float]) -> tuple[str, float] | None:
    """The side on which a voice's harmonics line up with a carrier, and where that is; None where they do not."""
    carriers_hz = np.array([band_hz[0] - _SSB_LOW_HZ, band_hz[1] + _SSB_LOW_HZ])
    audio_hz = (_SSB_LOW_HZ - _GUARD_HZ, _SSB_LOW_HZ + band_hz[1] - band_hz[0] + _GUARD_HZ)
    aligner = SpeechAligner(2, rate_hz, (1, -1), (audio_hz, audio_hz))
    believed: list[tuple[str, float]] = []
    for window in windows:
        aligner.process(np.stack([_turned(window, rate_hz, float(hz)) for hz in carriers_hz]))
        which = aligner.is_believed
        if which.sum() == 1:
            k = int(np.argmax(which))
            believed.append((("USB", "LSB")[k], float(carriers_hz[k] + aligner.offset_hz[k])))
    return believed[-1] if believed else None


def _together(measured: list[Measured], shifts_hz: list[float] | None) -> Guess:
    """One guess from the mean evidence of several windows; the first, the strongest, gives reasons and reference."""
    table = evidence_table()
    scores = np.mean([table.scores(one.values, one.seconds)[0] for one in measured], axis=0)
    guess = name_one(measured[0], 0, scores, table)
    seconds = sum(one.seconds for one in measured)
    shift_hz = shifts_hz[0] if shifts_hz else 0.0
    firm = guess.is_emission and seconds >= _FIRM_S
    return replace(guess, reference_hz=guess.reference_hz + shift_hz, seconds=seconds, firm=firm)


def _by_slope(windows: list[ComplexBlock], rate_hz: float, band_hz: tuple[float, float]) -> tuple[str, float]:
    """Which side a voice lies on, its lower tones being the stronger, and where its carrier then would be."""
    low_hz, high_hz = band_hz
    third_hz = (high_hz - low_hz) / 3.0
    frequency_hz = np.fft.fftfreq(len(windows[0]), 1.0 / rate_hz)
    power = np.square(np.abs(np.fft.fft(windows[0])))
    lower = power[(frequency_hz >= low_hz) & (frequency_hz < low_hz + third_hz)].sum()
    upper = power[(frequency_hz > high_hz - third_hz) & (frequency_hz <= high_hz)].sum()
    return ("USB", low_hz - _SSB_LOW_HZ) if lower >= upper else ("LSB", high_hz + _SSB_LOW_HZ)


def _turned(iq: ComplexBlock, rate_hz: float, by_hz: float) -> ComplexBlock:
    return np.asarray(iq * np.exp(-2j * np.pi * by_hz / rate_hz * np.arange(len(iq)))).astype(np.complex64)


def _floor_in(floor: np.ndarray, frequency_hz: Floats, region: Region) -> float:
    inside = (frequency_hz >= region.low_hz) & (frequency_hz <= region.high_hz)
    return float(floor[:, inside].sum(axis=1).mean())


def _scale(length: int) -> float:
    """What a full-scale tone adds up to over the bins of a Hann frame."""
    return float(length * np.sum(np.square(np.hanning(length + 1)[:-1])))
