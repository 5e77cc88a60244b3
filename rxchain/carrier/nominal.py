"""No reference to follow: the nominal frequency, or a fixed shift from it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.derotation import derotate
from rxchain.carrier.hops import hop_samples
from rxchain.carrier.joining import beginning
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.errors import SettingError
from rxchain.streams import ComplexBlock, Floats


class NominalFollower:
    """Turns each channel by a fixed frequency, in hops like the other followers, with no delay but the hop's.

    shift_hz : float64, (n_channels,): where each channel's carrier lies against its nominal frequency. It may be set
        anew while streaming: the phase stays continuous, and the new shift holds from the next hop on.
    """

    def __init__(self, n_channels: int, rate_hz: float, shift_hz: Floats | None = None) -> None:
        self.hop_samples = hop_samples(rate_hz)
        self.delay_samples = self.hop_samples - 1
        self._n_channels, self._rate_hz = n_channels, rate_hz
        self._shift_hz: Floats = np.zeros(n_channels)
        self._step: Floats = np.zeros(n_channels)
        self._base: Floats = np.zeros(n_channels)  # phase when the shift in force began, and the hops since
        self._hops = 0
        self.reset()
        self.shift_hz = np.zeros(n_channels) if shift_hz is None else shift_hz

    @property
    def shift_hz(self) -> Floats:
        """The shift in force, Hz, one per channel."""
        return self._shift_hz

    @shift_hz.setter
    def shift_hz(self, shift_hz: Floats) -> None:
        shift = np.array(shift_hz, np.float64)
        if shift.shape != (self._n_channels,) or not np.isfinite(shift).all():
            raise SettingError("shift_hz", shift_hz, f"{self._n_channels} finite numbers, one per channel")
        self._base, self._hops = self._base + self._step * self._hops, 0
        self._shift_hz = shift
        self._step = shift * self.hop_samples / self._rate_hz

    def reset(self) -> None:
        """As new, with the shift in force."""
        self._waiting: ComplexBlock = np.zeros((self._n_channels, 0), np.complex64)
        self._base = np.zeros(self._n_channels)
        self._hops = 0

    def process(self, iq: ComplexBlock) -> Turned:
        """Whole hops as they become complete; see :class:`rxchain.carrier.track.Turned`."""
        samples = np.concatenate([self._waiting, iq], axis=1)
        whole = samples.shape[1] // self.hop_samples * self.hop_samples
        self._waiting = samples[:, whole:]
        return self._turn(samples[:, :whole])

    def flush(self) -> Turned:
        """The samples short of a hop; the follower is as new afterwards."""
        rest = self._waiting
        short = rest.shape[1]
        padded = np.pad(rest, ((0, 0), (0, -short % self.hop_samples)))
        turned = self._turn(padded)
        self.reset()
        return beginning(turned, short)

    def _turn(self, samples: ComplexBlock) -> Turned:
        hops = samples.shape[1] // self.hop_samples
        edges = self._base[:, None] + self._step[:, None] * (self._hops + np.arange(hops + 1))
        self._hops += hops
        turned = derotate(samples, edges) if hops and self._shift_hz.any() else samples.copy()
        return Turned(turned, self._readings(edges, hops), self.hop_samples)

    def _readings(self, edges: Floats, hops: int) -> Track:
        nothing = np.zeros((self._n_channels, hops))
        lock: NDArray[np.int8] = np.full((self._n_channels, hops), Lock.NONE, np.int8)
        return Track(
            offset_hz=np.repeat(self._shift_hz[:, None], hops, axis=1),
            phase_cycles=0.5 * (edges[:, 1:] + edges[:, :-1]),
            amplitude=nothing,
            noise_density=nothing.copy(),
            lock=lock,
        )
