"""Every channel of a capture at once: one forward transform shared by all, a slice of its bins for each.

Overlap-save: a channel takes ``m`` bins about its frequency, multiplies them by its own filter's response (centred on
its exact frequency, whatever the bin spacing), and an ``m``-point inverse transform gives it at the low rate; what is
left of its frequency is turned out by a phase made from the absolute sample index, so it never drifts. Four hops go
through each transform call, because ``scipy.fft`` works on four rows side by side; two where delay matters.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from rxchain.errors import SettingError
from rxchain.kernels.fir import lowpass
from rxchain.streams import ComplexBlock, Floats
from rxchain.tuning.plan import STOP_DB, BankPlan

HOPS_A_BATCH, LIVE_HOPS_A_BATCH = 4, 2


class ChannelBank:
    """Tunes, filters and decimates groups of channels; each group has its own width and number of channels.

    process(iq) : complex64, (n,), any n, full scale 1.0. Returns one complex64 block ``(channels, samples)`` a group,
        in the order of the groups; a batch of hops at a time, so often empty.
    Channel sample ``k`` is the instant ``k / rate`` after the first sample of the stream; the filter's delay is out.
    """

    def __init__(self, plan: BankPlan, groups: Sequence[tuple[int, Floats]], hops_a_batch: int = HOPS_A_BATCH) -> None:
        """``groups`` : bins and channel offsets from the capture's centre, in hertz, of each group."""
        self.plan = plan
        self._hops_a_batch = hops_a_batch
        self._groups = [_Group(plan, bins, np.asarray(offsets_hz, dtype=np.float64)) for bins, offsets_hz in groups]
        widest = max((g.bins for g in self._groups), default=0)
        self._spectrum = np.empty((self._hops_a_batch, plan.length + widest), np.complex64)
        self._batch = self._hops_a_batch * plan.hop
        self._pending = np.zeros(plan.overlap + self._batch, np.complex64)
        self.reset()

    @property
    def delay_samples(self) -> int:
        """Samples of the capture that must have come after an instant before its channel samples come out."""
        return self.plan.overlap // 2 + self._batch

    def reset(self) -> None:
        """As new: time starts again at 0."""
        self._pending[:] = 0
        self._spectrum[:] = 0
        self._filled = self.plan.overlap
        self._hops = 0
        self._received = 0
        self._delivered = [0] * len(self._groups)

    @property
    def until_batch(self) -> int:
        """Samples that complete the batch in hand; groups come and go between batches."""
        return len(self._pending) - self._filled

    def add(self, bins: int, offsets_hz: Floats, before: int | None = None) -> int:
        """One more group from the next batch on, at the end or before another; returns the index of its first sample."""
        group = _Group(self.plan, bins, np.asarray(offsets_hz, dtype=np.float64))
        place = len(self._groups) if before is None else before
        self._groups.insert(place, group)
        if self.plan.length + bins > self._spectrum.shape[1]:
            wider = np.empty((self._hops_a_batch, self.plan.length + bins), np.complex64)
            wider[:, : self._spectrum.shape[1]] = self._spectrum
            self._spectrum = wider
        first = max(0, self._hops * group.hop - self.plan.overlap_of(bins) // 2)
        self._delivered.insert(place, first)
        return first

    def retune(self, shift_hz: float) -> None:
        """The capture's middle has moved up by so much, all channels stay where they are; those outside are silent.

        To be called when everything the bank remembers is silence: what it remembers was heard where the middle was.
        """
        for k, group in enumerate(self._groups):
            self._groups[k] = _Group(self.plan, group.bins, group.offsets_hz - shift_hz, silence_outside=True)

    def drop(self, place: int) -> None:
        """One group less; those after it move up."""
        del self._groups[place], self._delivered[place]

    def process(self, iq: ComplexBlock) -> list[ComplexBlock]:
        """The channel samples that have become complete, a block for each group."""
        self._received += len(iq)
        made: list[list[ComplexBlock]] = [[] for _ in self._groups]
        while len(iq):
            n = min(len(iq), len(self._pending) - self._filled)
            self._pending[self._filled : self._filled + n] = iq[:n]
            self._filled += n
            iq = iq[n:]
            if self._filled == len(self._pending):
                for blocks, block in zip(made, self._transform(), strict=True):
                    blocks.append(block)
        return [
            np.concatenate(blocks, axis=1) if len(blocks) != 1 else blocks[0]
            for blocks in (made_of or [group.nothing] for made_of, group in zip(made, self._groups, strict=True))
        ]

    def flush(self) -> list[ComplexBlock]:
        """The rest, as if silence followed: in all, one channel sample for each of its periods begun in the stream."""
        received = self._received
        wanted = [-(-received * group.bins // self.plan.length) for group in self._groups]
        tails: list[list[ComplexBlock]] = [[group.nothing] for group in self._groups]
        while any(done < want for done, want in zip(self._delivered, wanted, strict=True)):
            missing = len(self._pending) - self._filled
            for k, block in enumerate(self.process(np.zeros(missing, np.complex64))):
                surplus = max(0, self._delivered[k] - wanted[k])
                tails[k].append(block[:, : max(0, block.shape[1] - surplus)])
                self._delivered[k] -= surplus
        self._received = received
        return [np.concatenate(blocks, axis=1) for blocks in tails]

    def mean_spectrum(self, n_bins: int) -> Floats:
        """Mean power over the latest batch in ``n_bins`` equal parts of the capture, lowest frequency first.

        float64, (n_bins,), linear: a full-scale complex tone adds 1 to the part it lies in.
        """
        power = np.mean(np.abs(self._spectrum[:, : self.plan.length].astype(np.complex128)) ** 2, axis=0)
        edges = np.arange(n_bins) * self.plan.length // n_bins
        return np.asarray(np.add.reduceat(np.fft.fftshift(power), edges) / self.plan.length**2)

    def _transform(self) -> list[ComplexBlock]:
        plan = self.plan
        hops = sliding_window_view(self._pending, plan.length)[:: plan.hop]
        self._spectrum[:, : plan.length] = scipy.fft.fft(hops, axis=1)
        self._spectrum[:, plan.length :] = self._spectrum[:, : self._spectrum.shape[1] - plan.length]
        blocks = []
        for k, group in enumerate(self._groups):
            block = group.cut(self._spectrum, self._hops)
            lead = max(0, plan.overlap_of(group.bins) // 2 - self._hops * group.hop)
            block = block[:, lead:]  # the first outputs lie before the stream's first sample
            self._delivered[k] += block.shape[1]
            blocks.append(block)
        self._hops += self._hops_a_batch
        self._pending[: plan.overlap] = self._pending[self._batch :].copy()
        self._filled = plan.overlap
        return blocks


class _Group:
    """Channels of one width: their slices, responses and rotations."""

    def __init__(self, plan: BankPlan, bins: int, offsets_hz: Floats, silence_outside: bool = False) -> None:
        self.bins = bins
        self.offsets_hz = offsets_hz
        self._length = plan.length
        self._discard = plan.overlap_of(bins)
        self.hop = bins - self._discard
        limit_hz = plan.capture_rate_hz / 2.0
        outside = np.abs(offsets_hz) > limit_hz
        if outside.any() and not silence_outside:
            worst_hz = offsets_hz[np.argmax(np.abs(offsets_hz))]
            raise SettingError(
                "frequency", f"{worst_hz:+.0f}Hz from the centre", f"outside the capture's ±{limit_hz:.0f} Hz"
            )
        exact_bin = offsets_hz * plan.length / plan.capture_rate_hz
        nearest = np.round(exact_bin)
        self._first_bin = nearest.astype(np.int64) - bins // 2
        self._start = self._first_bin % plan.length
        self._responses = _responses(plan, bins, exact_bin - nearest)
        if outside.any():
            self._responses = np.where(outside[:, None], np.complex64(0), self._responses)
        # What an inverse transform over a slice starting at `first_bin` leaves to turn, in cycles per output sample.
        self._cycles = -((exact_bin - self._first_bin) / bins)
        within_hop = np.outer(self._cycles, np.arange(self.hop))
        self._turn = np.exp(2j * np.pi * (within_hop - np.floor(within_hop))).astype(np.complex64)
        self.nothing = np.zeros((len(offsets_hz), 0), np.complex64)

    def cut(self, spectrum: ComplexBlock, hops_before: int) -> ComplexBlock:
        """The group's channels over the batch whose spectra are given (with the first bins repeated at the end)."""
        n_channels, n_hops = len(self._start), spectrum.shape[0]
        sliced = sliding_window_view(spectrum, self.bins, axis=1)[:, self._start]
        np.multiply(sliced, self._responses, out=sliced)
        series = scipy.fft.ifft(sliced, axis=2, overwrite_x=True)
        block = np.empty((n_channels, n_hops * self.hop), np.complex64)
        for k in range(n_hops):
            turn = self._turn * self._phasor(hops_before + k)[:, None]
            np.multiply(series[k, :, self._discard :], turn, out=block[:, k * self.hop : (k + 1) * self.hop])
        return block

    def _phasor(self, hop_index: int) -> NDArray[np.complex64]:
        """Turn at the first kept sample of a hop, from its absolute index: float64, modulo one turn, hence no drift."""
        first_output = hop_index * self.hop
        first_input = hop_index * (self._length - self._length * self._discard // self.bins)
        overlap = self._length * self._discard // self.bins
        # The slice's own frequency, whole bins, over the transform's start: exact in integers.
        start_turn = (self._first_bin * (first_input - overlap)) % self._length / self._length
        turned = first_output * self._cycles
        cycles = turned - np.floor(turned) - start_turn
        phasor: NDArray[np.complex64] = np.exp(2j * np.pi * cycles).astype(np.complex64)
        return phasor


def _responses(plan: BankPlan, bins: int, fractions: Floats) -> NDArray[np.complex64]:
    """Each channel's filter at its slice's bins, (channels, bins), scaled for the shorter inverse transform.

    ``fractions`` : how far each channel lies from its nearest bin, in bins; the filter is centred there.
    """
    nearby = (np.arange(bins) - bins // 2) % plan.length
    distinct, which = np.unique(np.round(fractions, 9), return_inverse=True)
    scale = bins / plan.length
    rows = np.empty((len(distinct), bins), np.complex64)
    n_taps = plan.overlap + 1
    if bins == plan.length:
        delays = np.exp(-2j * np.pi * np.outer(np.ones(len(distinct)), nearby) * (plan.overlap // 2) / plan.length)
        shift = np.exp(2j * np.pi * distinct * (plan.overlap // 2) / plan.length)
        rows[:] = delays * shift[:, None]
    else:
        taps = lowpass(
            n_taps,
            plan.rate_hz(bins) / 2.0 - (plan.rate_hz(bins) / 2.0 - plan.usable_hz(bins)) / 2.0,
            plan.capture_rate_hz,
            STOP_DB,
        )
        t = np.arange(n_taps)
        for row, fraction in zip(rows, distinct, strict=True):
            centred = taps * np.exp(2j * np.pi * fraction * t / plan.length)
            row[:] = scipy.fft.fft(centred, plan.length)[nearby] * scale
    return rows[which] if len(distinct) > 1 else rows[:1]
