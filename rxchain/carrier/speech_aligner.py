"""Find the suppressed carrier of single-sideband speech from the voice alone, and turn the channel by it.

::

    samples -> frames of 64 ms -> floor -> complex cepstrum -> calibrated likelihood --+
                        |                                                              +-> verdict -> held offset -> turned
                        +--> whitened -> third-order product -> line ------------------+

The harmonics of a voice lie at multiples of its pitch; received off-tune by ``d`` they lie at ``d + k f0``. The pitch
moves and ``d`` does not, and so it can be told, to a fraction of a hertz, from a few seconds of speech. It is measured
before any correction (open loop), and held while nobody speaks. What it cannot tell: noise, tones and data give no
answer; pitched music is answered, rightly; percussive music and slow-scan pictures now and then wrongly; of two voices
with different offsets the louder one counts; offsets beyond 155 Hz can look like one within, a pitch away.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from rxchain.carrier.derotation import derotate
from rxchain.carrier.joining import beginning, join
from rxchain.carrier.speech_cepstrum import PitchCepstrum
from rxchain.carrier.speech_floor import SpeechFloor
from rxchain.carrier.speech_frames import STEP_HOPS, SpeechFrames
from rxchain.carrier.speech_likelihood import SpeechLikelihood
from rxchain.carrier.speech_line import SpeechLine
from rxchain.carrier.speech_verdict import SpeechVerdict
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.errors import SettingError
from rxchain.streams import Bools, ComplexBlock, Floats

OFFSET_SIGMA_HZ = 0.3  # of an answer that is right; 0.1 to 0.2 Hz rms on voices at 20 dB, more in more noise

_ANSWER_FRAMES = 8  # every quarter of a second
_SLEW_HZ_PER_S = 200.0  # a voice off-tune glides into place within a second; chosen, not measured


class SpeechAligner:
    """Follows the offset of single-sideband voices; see :class:`rxchain.carrier.follower.Follower`.

    sides : +1 for upper, -1 for lower sideband, one a channel. audio_hz : band of each channel's message.

    hop_samples : samples a hop. delay_samples : how far the output may run behind the input, at most: there is no
        look-ahead. offset_hz : float64, (n_channels,): offset of the carrier from its nominal frequency as last
        believed, 0 before; the track's offset glides to it. is_believed : whether it still is.

    A channel counts as locked while the answer is believed and somebody speaks, and otherwise as held, once there was
    an answer.
    """

    def __init__(
        self, n_channels: int, rate_hz: float, sides: Sequence[int], audio_hz: Sequence[tuple[float, float]]
    ) -> None:
        self._frames = SpeechFrames(n_channels, rate_hz, sides, audio_hz)
        self._cepstrum = PitchCepstrum(self._frames.frequency_hz, self._frames.frame_s)
        self.hop_samples = self._frames.step_samples // STEP_HOPS
        self.delay_samples = self._frames.step_samples - 1
        self._n_channels, self._hop_s = n_channels, self.hop_samples / rate_hz
        self._sides = np.array(sides, np.float64)
        self.reset()

    def reset(self) -> None:
        """As new, with the same settings."""
        n = self._n_channels
        self._waiting: ComplexBlock = np.zeros((n, 0), np.complex64)
        self._frames.reset()
        self._floor = SpeechFloor()
        self._line = SpeechLine(n, self._frames)
        self._likelihood = SpeechLikelihood(n, self._line.grid_hz)
        self._verdict = SpeechVerdict(n)
        self._n_frames = 0
        self.offset_hz: Floats = np.zeros(n)
        self._was_believed: Bools = np.zeros(n, np.bool_)
        self._turning_hz: Floats = np.zeros(n)
        self._edge_cycles: Floats = np.zeros(n)

    @property
    def is_believed(self) -> Bools:
        """Whether the evidence at hand bears out the offset, (n_channels,)."""
        return self._verdict.is_believed.copy()

    def process(self, iq: ComplexBlock) -> Turned:
        """Take in samples ``(n_channels, n)``, complex64; whole steps of six hops come out as they become complete."""
        if iq.ndim != 2 or iq.shape[0] != self._n_channels:
            raise SettingError("iq", iq.shape, f"samples have the shape ({self._n_channels}, n)")
        samples = np.concatenate([self._waiting, iq], axis=1)
        step = self._frames.step_samples
        whole = samples.shape[1] // step * step
        pieces = [self._advance(samples[:, k : k + step]) for k in range(0, whole, step)]
        self._waiting = samples[:, whole:].astype(np.complex64)
        return join(pieces, self._n_channels, self.hop_samples)

    def flush(self) -> Turned:
        """The samples short of a step; the follower is as new afterwards."""
        rest = self._waiting.shape[1]
        padded = np.pad(self._waiting, ((0, 0), (0, -rest % self._frames.step_samples)))
        turned = self._turn(padded) if rest else join([], self._n_channels, self.hop_samples)
        self.reset()
        return beginning(turned, rest)

    def _advance(self, step: ComplexBlock) -> Turned:
        spectrum = self._frames.spectra(step)
        if spectrum is not None:
            self._listen(spectrum)
        return self._turn(step)

    def _listen(self, spectrum: ComplexBlock) -> None:
        power = spectrum.real**2 + spectrum.imag**2
        self._likelihood.add(self._cepstrum.peaks(self._floor.excess(power)))
        self._line.add(spectrum, power, self._likelihood.lately)
        self._n_frames += 1
        if self._n_frames % _ANSWER_FRAMES == 0:
            self._verdict.answer(self._likelihood, self._line)
            believed = self._verdict.is_believed
            self.offset_hz = np.where(believed, self._sides * self._verdict.offset_hz, self.offset_hz)
            self._was_believed |= believed

    def _turn(self, step: ComplexBlock) -> Turned:
        hops = np.arange(1, STEP_HOPS + 1)
        reach_hz = _SLEW_HZ_PER_S * self._hop_s * hops
        missing_hz = (self.offset_hz - self._turning_hz)[:, None]
        turning_hz = self._turning_hz[:, None] + np.clip(missing_hz, -reach_hz, reach_hz)
        cycles = np.cumsum(np.concatenate([self._edge_cycles[:, None], turning_hz * self._hop_s], axis=1), axis=1)
        self._turning_hz, self._edge_cycles = turning_hz[:, -1].copy(), cycles[:, -1].copy()
        nothing = np.zeros((self._n_channels, STEP_HOPS))
        track = Track(
            offset_hz=turning_hz,
            phase_cycles=0.5 * (cycles[:, 1:] + cycles[:, :-1]),
            amplitude=nothing,
            noise_density=nothing.copy(),
            lock=np.repeat(self._lock[:, None], STEP_HOPS, axis=1),
        )
        return Turned(derotate(step, cycles), track, self.hop_samples)

    @property
    def _lock(self) -> NDArray[np.int8]:
        is_locked = self._verdict.is_believed & self._likelihood.is_voice_present
        return np.where(self._was_believed, np.where(is_locked, Lock.LOCKED, Lock.HELD), Lock.NONE).astype(np.int8)
