"""Takes a neighbour's part out of a channel before the channel's own emission is asked for its name."""

from __future__ import annotations

import numpy as np
import scipy.fft
from scipy import ndimage

from rxchain.identify.short_time import BIN_HZ, FRAME, FRAME_HZ, RATE_HZ, WINDOW_POWER, short_time
from rxchain.streams import Bools, ComplexBlock, Floats

_NEAREST_HZ = 900.0  # a sideband begins nearer to its carrier; common practice for voices is 300 Hz
_FLOOR_QUANTILE, _OVER_FLOOR = 0.08, 2.0
_HOLE_HZ = 200.0
_MIRRORED = 0.2  # share of a lump's power that its mirror image has if both are sidebands of one carrier
_EDGE_HZ = 100.0


def without_neighbours(iq: ComplexBlock) -> ComplexBlock:
    """A stretch at 12 kHz, complex64, (samples,), carrier near 0 Hz, without what begins far from the carrier, has no
    mirror image, and is not all there is: a neighbour's part gives way to noise as quiet as the quietest part.
    """
    frames = short_time(iq[None])[0]
    power = np.mean(np.square(frames.real) + np.square(frames.imag), axis=0, dtype=np.float64) / WINDOW_POWER
    power = scipy.fft.fftshift(ndimage.uniform_filter1d(power, 3, mode="wrap"))
    frequency_hz = scipy.fft.fftshift(FRAME_HZ)
    floor = float(np.quantile(power, _FLOOR_QUANTILE))
    lumps = _lumps(power > _OVER_FLOOR * floor)
    foreign = [
        (frequency_hz[a] - _EDGE_HZ, frequency_hz[b] + _EDGE_HZ)
        for a, b in lumps
        if _is_foreign(power - floor, frequency_hz, a, b) and len(lumps) > 1
    ]
    if not foreign or len(foreign) == len(lumps):
        return iq
    spectrum = scipy.fft.fft(iq)
    at_hz = scipy.fft.fftfreq(len(iq), 1.0 / RATE_HZ)
    is_foreign: Bools = np.any([(at_hz >= low) & (at_hz <= high) for low, high in foreign], axis=0)
    draws = np.random.default_rng(1).standard_normal((2, int(is_foreign.sum())))
    spectrum[is_foreign] = (draws[0] + 1j * draws[1]) * np.sqrt(0.5 * floor * len(iq))
    return np.asarray(scipy.fft.ifft(spectrum)).astype(np.complex64)


def _lumps(occupied: Bools) -> list[tuple[int, int]]:
    """First and last bins of what is occupied without holes to speak of."""
    places = np.flatnonzero(occupied)
    if not len(places):
        return []
    cuts = np.flatnonzero(np.diff(places) > round(_HOLE_HZ / BIN_HZ))
    starts, ends = np.concatenate([[0], cuts + 1]), np.concatenate([cuts, [len(places) - 1]])
    return [(int(places[a]), int(places[b])) for a, b in zip(starts, ends, strict=True)]


def _is_foreign(power: Floats, frequency_hz: Floats, first: int, last: int) -> bool:
    if (
        min(abs(frequency_hz[first]), abs(frequency_hz[last])) < _NEAREST_HZ
        or frequency_hz[first] < 0 < frequency_hz[last]
    ):
        return False
    own = float(power[first : last + 1].sum())
    mirrored = float(
        np.maximum(power[np.clip(FRAME - last, 0, FRAME - 1) : np.clip(FRAME - first, 0, FRAME - 1) + 1], 0).sum()
    )
    return mirrored < _MIRRORED * own
