"""Frequency and drift of a line just found.

From several spectra: a straight line through the peaks, each weighed by how far it stands out (a voice's pauses count
for nothing), by least squares with a prior on the drift. From block sums: the peak of their spectrum.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from rxchain.streams import Floats

_SEARCH_BINS = 2  # a peak lies no further from the stack's drift
_VARIANCE = 0.3  # bins^2: of a Hann spectrum's peak at a power of one against the noise, about twice the bound
_FLOOR = 0.01  # bins^2: what modulation leaves at any power
_HIGHEST_DB = 30.0
_FINE_SIZE = 512


@dataclass(frozen=True, slots=True)
class LineFit:
    """Position in bins at one spectrum's distance after the newest spectrum, bins a spectrum, and their covariance."""

    position_bins: float
    drift_bins: float
    variance: float
    covariance: float
    drift_variance: float


def peak_bins(levels_db: NDArray[np.floating[Any]], middle: int, reach: int) -> tuple[float, float]:
    """Place and height of the highest peak within ``reach`` bins of ``middle``, by a parabola through three bins."""
    k = middle - reach + int(np.argmax(levels_db[middle - reach : middle + reach + 1]))
    k = min(max(k, 1), len(levels_db) - 2)
    left, top, right = (float(level) for level in levels_db[k - 1 : k + 2])
    bend = left - 2.0 * top + right
    step = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
    return k + min(max(step, -0.5), 0.5), top


def fit_line(
    newest_first: NDArray[np.float32], middle: int, drift_bins: float, drift_error_bins: float, around_db: float
) -> LineFit:
    """The straight line through the peaks of spectra in dB, ``(spectra, bins)``.

    middle, drift_bins : where the stack has the line in the newest spectrum, and its drift in bins a spectrum.
    drift_error_bins : one standard deviation of that drift. around_db : mean log level about the line.
    """
    ages = np.arange(len(newest_first))
    places = np.rint(middle - drift_bins * ages).astype(int)
    peaks = [peak_bins(levels, place, _SEARCH_BINS) for levels, place in zip(newest_first, places, strict=True)]
    positions, heights_db = np.array(peaks).T
    power: Floats = 10.0 ** (np.minimum(heights_db - around_db, _HIGHEST_DB) / 10.0)
    weights = 1.0 / (_VARIANCE / power + _FLOOR)
    x = -(ages + 1.0)
    design = np.stack([np.ones_like(x), x], axis=1)
    normal = design.T @ (design * weights[:, None])
    normal[1, 1] += drift_error_bins**-2
    target = design.T @ (weights * positions)
    target[1] += drift_bins * drift_error_bins**-2
    covariance = np.linalg.inv(normal)
    position, drift = covariance @ target
    residue = positions - design @ (position, drift)
    spread = max(1.0, float(np.sum(weights * residue**2)) / max(1, len(x) - 2))
    covariance *= spread
    return LineFit(float(position), float(drift), covariance[0, 0], covariance[0, 1], covariance[1, 1])


def residual_hz(blocks: NDArray[np.complexfloating[Any, Any]], hop_s: float, reach_hz: float) -> float:
    """Frequency, within ``reach_hz`` of zero, of the line in block sums ``(hops,)`` turned by what is known.

    The peak of their spectrum is the maximum-likelihood estimate: D. C. Rife and R. R. Boorstyn, "Single-tone parameter
    estimation from discrete-time observations", IEEE Trans. IT-20, 1974.
    """
    reach = int(np.ceil(reach_hz * _FINE_SIZE * hop_s))
    power = np.abs(np.fft.fft(blocks, _FINE_SIZE)) ** 2
    near = power[np.arange(-reach - 1, reach + 2)]
    place, _ = peak_bins(near, reach + 1, reach)
    return (place - reach - 1) / (_FINE_SIZE * hop_s)
