"""The receiving half of broadcasters' pre-emphasis, as taps to be folded into a message's own filter.

NRSC-1 (EIA-549): pre-emphasis has one zero at 2122 Hz (75 us) and one pole at 8700 Hz; the receiver's curve is its exact
inverse, magnitude and phase.
"""

from __future__ import annotations

import numpy as np

from rxchain.streams import Floats

ZERO_HZ, POLE_HZ = 2_122.07, 8_700.0
_POINTS = 8_192
_TAPS_S = 65 / 12_000.0
_EDGE = 0.42  # of the rate: beyond, the phase is led back to zero, so that the taps stay few


def deemphasis_taps(rate_hz: float) -> Floats:
    """Real taps, odd in number, the curve about their middle tap: within 0.05 dB up to 0.4 of the rate."""
    frequency_hz = np.fft.rfftfreq(_POINTS, 1.0 / rate_hz)
    curve = (1.0 + 1j * frequency_hz / POLE_HZ) / (1.0 + 1j * frequency_hz / ZERO_HZ)
    beyond = np.clip((frequency_hz / rate_hz - _EDGE) / (0.5 - _EDGE), 0.0, 1.0)
    curve = np.abs(curve) * np.exp(1j * np.angle(curve) * np.cos(np.pi / 2.0 * beyond) ** 2)
    response = np.fft.irfft(curve, _POINTS)
    middle = round(_TAPS_S * rate_hz) // 2
    n_taps = 2 * middle + 1
    return np.asarray(np.roll(response, middle)[:n_taps] * np.kaiser(n_taps, 5.0))
