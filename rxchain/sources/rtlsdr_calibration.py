"""The error of a receiver's clock, learnt from a carrier whose frequency is known.

Its clock sets both where it is tuned to and how fast it samples: with an error of p, a carrier on f appears on
f / (1 + p). The strongest line within 150 millionths of f is taken for the carrier; it must stand well over the noise.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.fft

from rxchain.errors import SourceError
from rxchain.sources.rtlsdr_driver import ReceiverSettings
from rxchain.sources.rtlsdr_receiver import RtlsdrReceiver
from rxchain.streams import Block, ComplexBlock, Floats

_RATE_HZ = 1.2e6
_BESIDE_HZ = 250e3  # the receiver's own spike at the middle is kept out of the way
_PIECE = 1 << 18  # 0.22 s: lines of 5 Hz
_PIECES = 12
_SEARCH = 150e-6
_LEAST_SNR_DB = 15.0


@dataclass(frozen=True, slots=True)
class Calibration:
    """What was found. ppm : the clock's error in millionths, and one standard deviation of the mean.

    offset_hz : where the carrier appeared, from where it is known to be. snr_db : the line over the noise beside it.
    """

    serial: str
    ppm: float
    uncertainty_ppm: float
    offset_hz: float
    snr_db: float


def calibrate(wanted: str | None, frequency_hz: float, gain_db: float | None) -> Calibration:
    """Listens for two and a half seconds; raises :class:`SourceError` where no carrier stands out."""
    centre_hz = frequency_hz - _BESIDE_HZ if frequency_hz > 2 * _BESIDE_HZ else frequency_hz + _BESIDE_HZ
    receiver = RtlsdrReceiver(wanted, ReceiverSettings(_RATE_HZ, centre_hz, gain_db, patience_s=0.0))
    try:
        pieces = list(_pieces(receiver.blocks()))
    finally:
        receiver.close()
    rate_hz = receiver.info.sample_rate_hz
    lines = [strongest_line(piece, rate_hz, frequency_hz - centre_hz, frequency_hz * _SEARCH) for piece in pieces]
    snr_db = float(np.median([snr for _, snr in lines]))
    if snr_db < _LEAST_SNR_DB:
        raise SourceError(
            f"calibrate={frequency_hz:g}Hz: no carrier stands out there (the strongest is {snr_db:.0f} dB over the noise, "
            f"{_LEAST_SNR_DB:g} dB are needed); choose a stronger one, or more gain"
        )
    offsets_hz = np.array([offset for offset, _ in lines])
    offset_hz = float(np.median(offsets_hz))
    spread_hz = float(offsets_hz.std(ddof=1) / np.sqrt(len(offsets_hz)))
    seen_hz = frequency_hz + offset_hz
    return Calibration(
        receiver.serial, 1e6 * (frequency_hz / seen_hz - 1.0), 1e6 * spread_hz / frequency_hz, offset_hz, snr_db
    )


def strongest_line(iq: ComplexBlock, rate_hz: float, about_hz: float, within_hz: float) -> tuple[float, float]:
    """Offset from ``about_hz`` of the strongest line within that distance, and its power over the noise's there in dB.

    Between the bins it is placed by the parabola through the logarithms of the three highest (a Hann window).
    """
    n = len(iq)
    spectrum: Floats = np.abs(scipy.fft.fft(iq * np.hanning(n).astype(np.float32))).astype(np.float64) ** 2
    f = scipy.fft.fftfreq(n, 1.0 / rate_hz)
    near = np.flatnonzero(np.abs(f - about_hz) <= max(within_hz, 20.0 * rate_hz / n))
    peak = near[np.argmax(spectrum[near])]
    left, middle, right = np.log(spectrum[[peak - 1, peak, (peak + 1) % n]] + 1e-30)
    bend = left - 2 * middle + right
    fraction = 0.5 * (left - right) / bend if bend < 0 else 0.0
    snr_db = 10.0 * np.log10(spectrum[peak] / (np.median(spectrum[near]) + 1e-30))
    return float(f[peak] + fraction * rate_hz / n - about_hz), float(snr_db)


def _pieces(blocks: Iterator[Block]) -> Iterator[ComplexBlock]:
    """Pieces of equal length; what lies before a gap is dropped."""
    held = np.zeros(0, np.complex64)
    left = _PIECES
    for block in blocks:
        held = np.concatenate([held if not block.samples_lost else held[:0], block.iq])
        while len(held) >= _PIECE and left:
            yield held[:_PIECE]
            held, left = held[_PIECE:], left - 1
        if not left:
            return
