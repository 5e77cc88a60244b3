"""All figures of a group of channels: sums kept chunk by chunk, read out for the last seconds or for the whole run."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from typing import TypeAlias

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from rxchain.carrier.hops import hop_samples
from rxchain.carrier.speech_aligner import OFFSET_SIGMA_HZ
from rxchain.carrier.track import Lock, Track, Turned
from rxchain.detectors.stereo import sum_and_difference
from rxchain.emissions import Reference
from rxchain.kernels.overlap_save import Windows
from rxchain.meters.carrier_figures import BLOCK_HOPS, CarrierSums, carrier_blocks
from rxchain.meters.depth import RECENT_CHUNKS, DepthMeter
from rxchain.meters.figures import Figures
from rxchain.meters.noise_floor import LEAST_NOISE_SHARE, NoiseFloor
from rxchain.meters.readings import efficiency_reading, level_reading, noise_error, ratio_reading_db, snr_reading
from rxchain.meters.spectra import FRAMES, MessageSpectra, MeteredChannel
from rxchain.meters.tally import Tally
from rxchain.streams import Bools, Floats, Reading

Peaks: TypeAlias = tuple[Floats, Floats, Floats, Floats, Bools]
__all__ = ["GroupMeters", "MeteredChannel"]

_CHUNK_HOPS = 48  # 0.26 s
_BESIDE_HZ = 2_500.0
_PRESENT_RATIO = 0.2  # message power over noise power, in a chunk, that counts as something being sent
_PRESENT_DEVIATIONS = 3.0  # of the noise, by which it must exceed that
# Relative error of the noise floor that stays however long one measures: where the emission fills the channel the floor
# is what shows between its words, and some of them is always taken for noise (measured on voices).
_LEAST_BIAS, _BIAS_OF_FULL_CHANNEL = 0.007, 0.06
_BIAS_OF_STEREO = 0.04  # what the law of quadrature stereo scatters beyond its messages
_LEAST_CARRIER = 0.1  # of the power found at its place
_DOUBT_OF_WEAK = 0.6  # share of a peak
_HANG_CHUNKS = 6  # a pause of about a second and a half still belongs to the message


class GroupMeters:
    """Meters of the channels of one group.

    rate_hz : the channels' rate; usable_hz : half of the band within which their noise is flat.
    history_s : how far back :meth:`between` can reach.
    process(turned) : upright samples and the follower's readings, any split of them.
    """

    def __init__(
        self, channels: Sequence[MeteredChannel], rate_hz: float, usable_hz: float, history_s: float = 0.0
    ) -> None:
        self._channels = tuple(channels)
        n = len(channels)
        self._rate_hz, self._hop = rate_hz, hop_samples(rate_hz)
        self._chunk = _CHUNK_HOPS * self._hop
        self._frame = 2 * self._chunk // FRAMES
        self._history = max(RECENT_CHUNKS, int(np.ceil(history_s * rate_hz / self._chunk)))
        self._spectra = MessageSpectra(channels, rate_hz, self._frame)
        # The floor is looked for near the emission: a recording may have been filtered narrower than its rate.
        reaches_hz = [_reach_hz(channel) for channel in channels]
        self._usable_hz = min(usable_hz, max(reaches_hz))
        self._occupied = np.minimum(self._spectra.sideband_width_hz / (2.0 * self._usable_hz), 1.0)
        self._is_stereo: Bools = np.array([channel.emission.family == "AM-STEREO" for channel in channels])
        self._has_depth: Bools = np.array([channel.emission.has_depth for channel in channels])
        self._has_carrier: Bools = np.array(
            [channel.emission.reference is not Reference.NOMINAL for channel in channels]
        )
        # Without a carrier's phase these are no messages: what came before the first lock does not count.
        self._needs_phase: Bools = np.array(
            [c.emission.reference is Reference.SQUARE and c.sideband == "both" for c in channels]
        )
        self._follows_voice: Bools = np.array([channel.follows_voice for channel in channels])
        self._by_lock: Bools = np.array([channel.emission.reference is Reference.CARRIER for channel in channels])
        self._bands = [channel.audio_hz for channel in channels]
        self._windows: Windows[np.complex64] = Windows((n,), self._frame, self._chunk, np.complex64)
        self.reset()

    def reset(self) -> None:
        """As new, with the same channels."""
        n = len(self._channels)
        self._windows.reset()
        self._tracks: list[Track] = []
        self._chunks = 0
        self._lost: list[tuple[int, int]] = []
        self._floor = NoiseFloor(n, self._frame, self._rate_hz, self._usable_hz)
        block_s = BLOCK_HOPS * self._hop / self._rate_hz
        self._carrier = CarrierSums(n, block_s)
        self._depth = DepthMeter(self._spectra.is_double, self._frame, self._rate_hz, self._bands, self._history)
        self._total = Tally(n, self._spectra.n_messages)
        self._recent: deque[Tally] = deque(maxlen=self._history)
        self._waiting: deque[Tally] = deque()
        self._heard_before = np.full(n, _HANG_CHUNKS + 1)
        self._was_locked: Bools = np.zeros(n, bool)
        self._voice_hz: Floats = np.full(n, np.nan)  # offset as last found from a voice
        self._recent_carriers: deque[tuple[Floats, Floats, Bools]] = deque(maxlen=self._history)

    def mark_lost(self, first_sample: int, n_samples: int) -> None:
        """Samples of the upright stream that were lost: whatever chunk they touch counts in no figure."""
        if self._lost and self._lost[-1][0] <= first_sample <= self._lost[-1][1]:  # a long gap is told in many parts
            first_sample, n_samples = self._lost[-1][0], first_sample + n_samples - self._lost[-1][0]
            del self._lost[-1]
        self._lost.append((first_sample, first_sample + n_samples))

    def process(self, turned: Turned) -> None:
        """Takes in upright samples."""
        iq = turned.iq
        if turned.track.lock.shape[1]:
            self._tracks.append(turned.track)
        while iq.shape[1]:
            window, iq = self._windows.take(iq)
            if window is not None:
                self._measure(window, self._take_track())

    def recent(self) -> list[Figures]:
        """Figures over the last three seconds."""
        return self._figures_of(slice(-RECENT_CHUNKS, None), by_presence=False)

    def between(self, first_s: float, last_s: float) -> list[Figures]:
        """Figures of a stretch of time, in seconds of the upright stream, while the emission was present in it."""
        oldest = self._chunks - len(self._recent)
        chunk_s = self._chunk / self._rate_hz
        first = max(0, round(first_s / chunk_s) - oldest)
        last = max(first + 1, round(last_s / chunk_s) - oldest)
        return self._figures_of(slice(first, last), by_presence=True)

    def levels_db(self, first_s: float, last_s: float) -> Floats:
        """Level of each chunk of a stretch of time, dB over full scale, (channels, chunks)."""
        oldest = self._chunks - len(self._recent)
        chunk_s = self._chunk / self._rate_hz
        chunks = list(self._recent)[
            max(0, round(first_s / chunk_s) - oldest) : max(0, round(last_s / chunk_s) - oldest)
        ]
        levels = [10.0 * np.log10(chunk.level + 1e-30) for chunk in chunks]
        return np.stack(levels, axis=1) if levels else np.zeros((len(self._channels), 0))

    def _figures_of(self, chunks: slice, by_presence: bool) -> list[Figures]:
        n = len(self._channels)
        tally = Tally(n, self._spectra.n_messages)
        for chunk in list(self._recent)[chunks]:
            tally.add(chunk, chunk.present if by_presence else np.ones(n, bool))
        carrier = CarrierSums(n, BLOCK_HOPS * self._hop / self._rate_hz)
        for blocks in list(self._recent_carriers)[chunks]:
            carrier.add(*blocks)
        return self._figures(tally, carrier, self._depth.recent_peaks(chunks))

    def overall(self) -> list[Figures]:
        """Figures since the start, while the emission was present."""
        n = len(self._channels)
        tally = Tally(n, self._spectra.n_messages)
        tally.add(self._total, np.ones(n, bool))
        for chunk in self._waiting:  # what may still turn out to be a pause counts as present while it is the last
            tally.add(chunk, chunk.present | (~self._by_lock & (self._heard_before <= _HANG_CHUNKS)))
        return self._figures(tally, self._carrier, self._depth.peaks())

    def _take_track(self) -> Track:
        """The readings of the next chunk's hops."""
        joined = [np.concatenate([getattr(t, name) for t in self._tracks], axis=1) for name in _TRACK_FIELDS]
        self._tracks = [Track(*(field[:, _CHUNK_HOPS:] for field in joined))]
        return Track(*(field[:, :_CHUNK_HOPS] for field in joined))

    def _measure(self, window: NDArray[np.complex64], track: Track) -> None:
        half = self._frame // 2
        first, last = self._chunks * self._chunk - self._frame, (self._chunks + 1) * self._chunk
        self._chunks += 1
        self._lost = [stretch for stretch in self._lost if stretch[1] > first]
        n = len(self._channels)
        valid = np.full(n, not any(start < last and stop > first for start, stop in self._lost))
        frames = sliding_window_view(window, self._frame, axis=1)[:, ::half]
        # Before the stream's first sample there is nothing to measure.
        spectra = self._spectra.transform(frames[:, 2 if self._chunks == 1 else 1 :])
        density = self._spectra.density(spectra)
        self._floor.add(density, valid)
        if self._chunks % 4 == 0 or self._chunks < 4:
            self._floor.estimate()
        upright = window[:, self._frame :]
        phase, power, locked = carrier_blocks(upright, track, self._hop, valid)
        self._carrier.add(phase, power, locked)
        self._recent_carriers.append((phase, power, locked))
        is_locked: Bools = np.asarray(locked.all(axis=1))
        is_voiced = track.lock[:, -1] == Lock.LOCKED
        amplitude, mean = self._spectra.amplitude(spectra), density.mean(axis=1, dtype=np.float64)
        chunk = Tally(n, self._spectra.n_messages)
        chunk.sidebands = self._spectra.sideband_power(mean)
        if self._is_stereo.any():
            # Left and right are linear only in what the law of quadrature stereo makes of the channel.
            by_law = sum_and_difference(window[self._is_stereo])
            frames_by_law = sliding_window_view(by_law, self._frame, axis=1)[:, ::half]
            spectra[self._is_stereo] = self._spectra.transform(frames_by_law[:, -spectra.shape[1] :])
            density = self._spectra.density(spectra)
            mean = density.mean(axis=1, dtype=np.float64)
        messages, leaked = self._spectra.message_power(spectra, density, mean)
        chunk.leaked = np.where(is_locked, leaked, 0.0)
        self._voice_hz = np.where(self._follows_voice & is_voiced, track.offset_hz[:, -1], self._voice_hz)
        is_followed: Bools = np.asarray((track.lock != Lock.NONE).all(axis=1))
        self._fill(chunk, valid, upright, messages, power.mean(axis=1), is_locked, is_followed)
        if self._has_depth.any():
            # The window reaches back into the chunk before.
            can_tell = is_locked & self._was_locked & self._has_depth & valid
            self._depth.process(frames, window[:, half:-half], amplitude, chunk.floor, can_tell)
        self._was_locked = is_locked
        self._recent.append(chunk)
        self._settle(chunk)

    def _fill(
        self,
        chunk: Tally,
        valid: Bools,
        upright: NDArray[np.complex64],
        messages: Floats,
        carrier_power: Floats,
        locked: Bools,
        is_followed: Bools,
    ) -> None:
        """One chunk's sums; channels whose samples were lost add nothing."""
        width_hz, with_edges_hz = self._spectra.noise_bandwidth_hz, self._spectra.width_with_edges_hz
        floor = np.where(np.isnan(self._floor.density), 0.0, self._floor.density)
        by_quadrature = self._spectra.is_double & locked
        own = messages[:, -1] / np.maximum(with_edges_hz[:, -1], 1.0)
        floor = np.where(by_quadrature, own, floor)
        noise = floor[:, None] * width_hz
        messages = messages - floor[:, None] * (with_edges_hz - width_hz)
        chunk.by_quadrature = by_quadrature.astype(np.float64)
        chunk.chunks = valid.astype(np.float64)
        chunk.level = np.mean(np.square(upright.real) + np.square(upright.imag), axis=1, dtype=np.float64)
        chunk.level_squared = chunk.level**2
        chunk.message = messages
        chunk.noise = noise
        chunk.floor = floor
        chunk.floor_error = np.nan_to_num(self._floor.relative_error, nan=1.0)
        chunk.floor_bias = _LEAST_BIAS + _BIAS_OF_FULL_CHANNEL * self._occupied**3 + _BIAS_OF_STEREO * self._is_stereo
        chunk.noise_share = self._floor.noise_share
        chunk.carrier = np.where(locked, carrier_power, 0.0)
        chunk.locked = locked.astype(np.float64)
        rows = np.arange(messages.shape[1]) < self._spectra.n_messages[:, None]
        signal = (messages * rows).sum(axis=1)
        background = (noise * rows).sum(axis=1)
        sent = signal > (1.0 + _PRESENT_RATIO + _PRESENT_DEVIATIONS * chunk.floor_error) * background
        chunk.present = np.where(self._by_lock, locked, sent & (is_followed | ~self._needs_phase)) & valid
        chunk.keep_only(valid)

    def _settle(self, chunk: Tally) -> None:
        """Adds chunks to the whole run's sums once it is known whether they lie within the emission's time."""
        self._waiting.append(chunk)
        if len(self._waiting) <= _HANG_CHUNKS:
            return
        oldest = self._waiting.popleft()
        self._heard_before = np.where(oldest.present, 0, self._heard_before + 1)
        soon = np.any([later.present for later in self._waiting], axis=0)
        within = oldest.present | (~self._by_lock & (self._heard_before <= _HANG_CHUNKS) & soon)
        self._total.add(oldest, within)

    def _figures(self, tally: Tally, carrier: CarrierSums, peaks: Peaks) -> list[Figures]:
        offset_hz, offset_sigma_hz = carrier.offset_hz()
        power = carrier.power()
        positive, positive_sigma, negative, negative_sigma, any_depth = peaks
        chunk_s, block_s = self._chunk / self._rate_hz, BLOCK_HOPS * self._hop / self._rate_hz
        figures = []
        for k, channel in enumerate(self._channels):
            n_messages = int(self._spectra.n_messages[k])
            width_hz = (channel.audio_hz[1] - channel.audio_hz[0]) * n_messages
            cn0 = efficiency = None
            sent_carrier = self._has_carrier[k] and channel.emission.reference is not Reference.SQUARE
            if sent_carrier and np.isfinite(power[k]) and tally.mean("floor", k) > 0:
                floor = tally.mean("floor", k)
                carrier_power = max(power[k] - floor / block_s, _LEAST_CARRIER * power[k])
                seconds = max(carrier.seconds[k], block_s)
                relative2 = 2 * floor / (carrier_power * seconds) + noise_error(tally, k, width_hz, chunk_s) ** 2
                cn0 = ratio_reading_db(carrier_power / floor, np.sqrt(relative2))
                efficiency = efficiency_reading(tally, k, carrier_power, self._spectra.sideband_width_hz[k], chunk_s)
            depth: list[Reading | None] = [None, None, None]
            if self._has_depth[k] and any_depth[k]:
                # Of a message under the noise the peaks may be the noise's as well.
                is_weak = tally.message[k, :n_messages].sum() < 2.0 * tally.noise[k, :n_messages].sum()
                doubt = _DOUBT_OF_WEAK * np.array([positive[k], negative[k]]) if is_weak else np.zeros(2)
                rise_sigma, fall_sigma = np.hypot([positive_sigma[k], negative_sigma[k]], doubt)
                depth = _depth_readings(positive[k], rise_sigma, negative[k], fall_sigma)
            offset = None
            if self._has_carrier[k] and np.isfinite(offset_hz[k]):
                offset = Reading(float(offset_hz[k]), float(offset_sigma_hz[k]))
            if np.isfinite(self._voice_hz[k]):
                offset = Reading(float(self._voice_hz[k]), OFFSET_SIGMA_HZ)
            figures.append(
                Figures(
                    snr_db=snr_reading(tally, k, n_messages, width_hz, chunk_s, LEAST_NOISE_SHARE),
                    carrier_offset_hz=offset,
                    carrier_to_noise_density_dbhz=cn0,
                    depth_percent=depth[0],
                    depth_positive_percent=depth[1],
                    depth_negative_percent=depth[2],
                    power_efficiency_percent=efficiency,
                    level_dbfs=level_reading(tally, k),
                )
            )
        return figures


def _reach_hz(channel: MeteredChannel) -> float:
    """How far from the carrier to look for noise alone; quadrature stereo fills several times its message's band."""
    high_hz = channel.audio_hz[1]
    return 4.0 * high_hz if channel.emission.family == "AM-STEREO" else high_hz + _BESIDE_HZ


_TRACK_FIELDS = ("offset_hz", "phase_cycles", "amplitude", "noise_density", "lock")


def _depth_readings(rise: float, rise_sigma: float, fall: float, fall_sigma: float) -> list[Reading | None]:
    both = Reading(50.0 * (rise + fall), 50.0 * float(np.hypot(rise_sigma, fall_sigma)))
    return [both, Reading(100.0 * rise, 100.0 * rise_sigma), Reading(100.0 * fall, 100.0 * fall_sigma)]
