"""The envelope detector: the channel's magnitude, whatever its phase does.

The magnitude is wider than the channel (its square is twice as wide, and it has further terms), so it is taken at a
multiple of the channel's rate and only then filtered down to the message's band; at the channel's own rate those terms
would fold back into the message. The channel is first limited to the emission's own band: what lies beside it would
beat with the carrier.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from rxchain.kernels.fir import ComplexTaps, bandpass, centred, kaiser_taps
from rxchain.kernels.overlap_save import WindowedStage, Windows
from rxchain.kernels.smooth_numbers import next_smooth
from rxchain.streams import ComplexBlock, FloatBlock

STOP_DB, LIVE_STOP_DB = 80.0, 60.0
_SLOPE_HZ, _LIVE_SLOPE_HZ = 300.0, 600.0
# A full-wave rectifier's mean: the series of |cos| starts with 2 / pi. Its harmonics lie at twice the intermediate
# frequency and up, so once they are filtered out nothing is left but the envelope at this scale.
RECTIFIER_GAIN = np.float32(2.0 / np.pi)


def emission_band(low_hz: float, high_hz: float, rate_hz: float, live: bool = False) -> ComplexTaps:
    """Taps that pass the emission's band, ``low_hz`` to ``high_hz`` from the carrier, with a 300 Hz slope beyond.

    ``live`` : a slope of 600 Hz, in less than half the time.
    """
    slope_hz, stop_db = (_LIVE_SLOPE_HZ, LIVE_STOP_DB) if live else (_SLOPE_HZ, STOP_DB)
    n_taps = kaiser_taps(slope_hz / rate_hz, stop_db)
    limit_hz = rate_hz / 2.0 - slope_hz / 2.0
    low_hz, high_hz = max(low_hz - slope_hz / 2.0, -limit_hz), min(high_hz + slope_hz / 2.0, limit_hz)
    return bandpass(n_taps, low_hz, high_hz, rate_hz, stop_db)


class EnvelopeDetector(WindowedStage[np.complex64]):
    """Messages of a group of channels by their envelopes.

    bands : taps of each channel's own band, see :func:`emission_band`; padded to one length.
    audio_taps : each channel's message band at the channel's rate, real and symmetric, padded to one length.
    oversampling : multiple of the channel's rate at which magnitudes are taken.
    process(iq) : complex64, (channels, n). Returns float32, (channels, 1, m): in the channel's own units;
        an A3E carrier of amplitude C and depth mu gives the message at peak C * mu, as the coherent detector does.
    active_rows : channels whose messages are wanted; None for all. The others' output is silence; one that joins is
        right once ``delay_samples`` twice over have passed.
    """

    active_rows: NDArray[np.intp] | None = None

    def __init__(
        self,
        bands: Sequence[ComplexTaps],
        audio_taps: Sequence[ComplexTaps],
        oversampling: int = 2,
        hop: int = 256,
    ) -> None:
        n_channels = len(bands)
        band, audio = _stacked(bands), _stacked(audio_taps)
        self._oversampling = oversampling
        length = next_smooth(band.shape[1] - 1 + hop, multiple_of=2)
        self._band = scipy.fft.fft(band, length, axis=1).astype(np.complex64)
        audio_length = next_smooth(audio.shape[1] - 1 + hop, multiple_of=2)
        response = scipy.fft.fft(audio, audio_length, axis=1)[:, : audio_length // 2 + 1]
        self._audio = (response / oversampling).astype(np.complex64)
        self._audio_length = audio_length
        self._magnitude = Windows((n_channels,), (audio_length - hop) * oversampling, hop * oversampling, np.float32)
        delay = band.shape[1] // 2 + audio.shape[1] // 2
        self._set_up((n_channels,), np.complex64, length - hop, hop, delay, (n_channels, 1))

    def reset(self) -> None:
        """As new, with the same settings."""
        super().reset()
        self._magnitude.reset()

    def _advance(self, window: ComplexBlock) -> FloatBlock:
        hop = self._windows.hop
        magnitude = np.zeros((len(window), hop * self._oversampling), np.float32)
        rows = np.arange(len(window)) if self.active_rows is None else self.active_rows
        if len(rows):
            magnitude[rows] = self._fine_magnitude(window[rows], self._band[rows])
        full, _ = self._magnitude.take(magnitude)
        audio = np.zeros((len(window), 1, hop), np.float32)
        if full is not None and len(rows):
            spectrum = scipy.fft.rfft(full[rows], axis=1)[:, : self._audio.shape[1]] * self._audio[rows]
            audio[rows, 0] = scipy.fft.irfft(spectrum, self._audio_length, axis=1)[:, -hop:]
        return audio

    def _fine_magnitude(self, window: ComplexBlock, band: NDArray[np.complex64]) -> FloatBlock:
        """The new part of a window, limited to its band, as magnitudes at the higher rate."""
        times, (n_channels, length) = self._oversampling, window.shape
        spectrum = scipy.fft.fft(window, axis=1)
        spectrum *= band
        wide = np.zeros((n_channels, length * times), np.complex64)
        half = length // 2
        wide[:, :half], wide[:, -half:] = spectrum[:, :half], spectrum[:, half:]
        fine = scipy.fft.ifft(wide, axis=1, overwrite_x=True)[:, self._windows.overlap * times :]
        magnitude: FloatBlock = np.abs(fine)
        magnitude *= np.float32(times)
        return magnitude


def _stacked(taps: Sequence[ComplexTaps]) -> NDArray[np.complex128]:
    longest = max(len(one) for one in taps)
    return np.stack([centred(one, longest) for one in taps])
