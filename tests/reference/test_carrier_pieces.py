"""The followers' parts against plain ways of computing the same thing."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import freqz

from rxchain.carrier.block_sums import BlockSums, hann
from rxchain.carrier.derotation import derotate
from rxchain.carrier.fading import MotionWatch
from rxchain.carrier.frequency_filter import FrequencyFilter
from rxchain.carrier.history import History
from rxchain.carrier.line_choice import LineChoice
from rxchain.carrier.line_fit import fit_line, residual_hz
from rxchain.carrier.message_band import MessageBand
from rxchain.carrier.power_law import line_signal, signal_noise_density
from rxchain.carrier.slant_stack import SlantStack
from rxchain.carrier.track import Follow
from rxchain.carrier.window_contest import WindowContest

RATE_HZ = 12_000.0
HOP = 64
HOP_S = HOP / RATE_HZ
FLOAT32 = 3e-6  # a few dozen roundings


@pytest.mark.parametrize("hop", [40, 64, 88, 256])
def test_derotation_is_multiplication_by_the_straight_phase(hop: int) -> None:
    rng = np.random.default_rng(1)
    edges = np.cumsum(rng.uniform(-3.0, 3.0, (4, 6)), axis=1) + 1e6
    samples = (rng.standard_normal((4, 5 * hop)) + 1j * rng.standard_normal((4, 5 * hop))).astype(np.complex64)
    k = (np.arange(5 * hop) + 0.5) / hop
    phase = np.array([np.interp(k, np.arange(6), row) for row in edges])
    assert np.allclose(derotate(samples, edges), samples * np.exp(-2j * np.pi * phase), atol=4 * FLOAT32)


@pytest.mark.parametrize("span", [2, 4])
def test_block_sums_are_windowed_means_about_each_frequency(span: int) -> None:
    rng = np.random.default_rng(2)
    line_hz = np.array([0.0, -313.0, 40.5])
    sums = BlockSums(3, RATE_HZ, HOP, span)
    sums.retune(line_hz)
    samples = (rng.standard_normal((3, 9 * HOP)) + 1j * rng.standard_normal((3, 9 * HOP))).astype(np.complex64)
    window = hann(span * HOP) / hann(span * HOP).sum()
    middle = (np.arange(span * HOP) + 0.5 - span * HOP / 2) / RATE_HZ
    for c in range(3):
        weights = window * np.exp(-2j * np.pi * line_hz[c] * middle)
        direct = [samples[c, h * HOP : (h + span) * HOP] @ weights for h in range(10 - span)]
        assert np.allclose(sums.sums(samples)[c], direct, atol=FLOAT32)
        assert np.allclose(sums.sums_of(c, samples[c]), direct, atol=FLOAT32)


def test_block_sums_noise_bandwidth_is_harris_figure() -> None:
    """1.50 bins for a Hann window: F. J. Harris 1978, table I."""
    assert BlockSums(1, RATE_HZ, HOP, 2).noise_bandwidth_hz == pytest.approx(1.5 * RATE_HZ / (2 * HOP), rel=1e-3)


def test_history_holds_the_newest_values() -> None:
    history = History((2,), 10, np.float64)
    stream = np.arange(200.0)
    for k in range(0, 200, 4):
        history.push(np.stack([stream[k : k + 4]] * 2))
        expected = np.concatenate([np.zeros(10), stream])[k + 4 : k + 14]
        assert np.array_equal(history.latest(10)[1], expected)
        assert np.array_equal(history.latest(3, ago=5)[0], expected[2:5])


def contest(lag: int = 24) -> WindowContest:
    overlap = BlockSums(1, RATE_HZ, HOP, 2).overlap_correlation
    return WindowContest(40, ((2, 2), (5, 5), (24, 24), (24, 200)), lag, 4, HOP_S, overlap)


def test_the_contest_finds_the_width_that_noise_and_motion_ask_for() -> None:
    """A steady line in noise takes the longest window; a line that turns at 8 Hz takes a short one."""
    rng = np.random.default_rng(3)
    shares = {}
    for turning_hz in (0.0, 8.0):
        smoother = contest()
        n = smoother.length + 400
        noise = 0.1 * (rng.standard_normal((40, n)) + 1j * rng.standard_normal((40, n)))
        blocks = np.exp(2j * np.pi * turning_hz * HOP_S * np.arange(n)) + noise
        planes = np.stack([blocks.real, blocks.imag]).astype(np.float32)
        for k in range(0, 400, 4):
            smoothed = smoother.smooth(planes[:, :, k : k + smoother.length], np.full(40, 0.02), np.full(40, HOP_S * k))
        shares[turning_hz] = float(np.mean(smoothed.noise_share))
        truth = np.exp(2j * np.pi * turning_hz * HOP_S * (396 + smoother.length - 28 + np.arange(4)))
        assert np.abs(np.angle(smoothed.line / truth)).max() < 0.35
    assert shares[0.0] < 0.02
    assert shares[8.0] > 0.1


def test_the_contest_states_the_noise_it_lets_through() -> None:
    """Noise power of the smoothed line, by trial, against the share stated; blocks that overlap share samples."""
    rng = np.random.default_rng(4)
    smoother = contest()
    sums = BlockSums(40, RATE_HZ, HOP, 2)
    n = smoother.length + 40
    noise = rng.standard_normal((2, 40, (n + 1) * HOP)) / np.sqrt(2)
    blocks = 1.0 + sums.sums((noise[0] + 1j * noise[1]).astype(np.complex64))
    power = sums.noise_bandwidth_hz / RATE_HZ
    assert np.mean(np.abs(blocks - 1.0) ** 2) == pytest.approx(power, rel=0.05)
    planes = np.stack([blocks.real, blocks.imag]).astype(np.float32)
    errors, stated = [], []
    for k in range(0, 40, 4):
        smoothed = smoother.smooth(planes[:, :, k : k + smoother.length], np.full(40, power), np.full(40, HOP_S * k))
        errors.append(np.mean(np.abs(smoothed.recent - 1.0) ** 2))
        stated.append(np.mean(smoothed.recent_share) * power)
    # 40 channels of windows 0.1 s long: their powers scatter by a tenth or so.
    assert np.mean(errors) == pytest.approx(np.mean(stated), rel=0.25)


def test_the_frequency_filter_has_the_bandwidth_it_was_designed_for() -> None:
    """White jerk of the design: noise bandwidth 1 Hz or so at 15 dB-Hz, 5 to 6 Hz at 60 dB-Hz, by trial."""
    rng = np.random.default_rng(5)
    for cn0_dbhz, low_hz, high_hz in ((25, 0.9, 2.5), (60, 3.5, 7.0)):
        channels, noise = 60, (1.5 * RATE_HZ / (2 * HOP)) / 10 ** (cn0_dbhz / 10)
        filters = FrequencyFilter(channels, 4, HOP_S, 40.0)
        for c in range(channels):
            filters.start(c, 0.0, 0.0, 0.0, 0.02, (1.0, 0.0, 4.0), 1.0)
        errors = []
        for k in range(400):
            draws = rng.standard_normal((2, channels, 4)) * np.sqrt(noise / 2)
            blocks = (1.0 + draws[0] + 1j * draws[1]).astype(np.complex64)
            on, off = np.ones(channels, np.bool_), np.zeros(channels, np.bool_)
            filters.follow(blocks, np.full(channels, noise), on, off, np.zeros(channels))
            if k > 200:
                errors.append(filters.phase_cycles - np.rint(filters.phase_cycles))
        variance = np.mean((2 * np.pi * np.array(errors)) ** 2)
        # Independent blocks here: their noise per hertz is the block's over the block rate.
        bandwidth_hz = variance / (noise * HOP_S)
        assert low_hz < bandwidth_hz < high_hz


def test_the_slant_stack_finds_a_drifting_line_a_plain_average_loses() -> None:
    rng = np.random.default_rng(6)
    stack = SlantStack(bins=81, around_bins=15, drift_bins=0.3, spectra=(8, 24))
    drift, power = 0.3 * 8 / 9, 30.0
    spectra = []
    for age in range(24):
        draws = rng.exponential(size=(1, stack.width))
        place = stack.margin + 50 - round(drift * age)
        draws[0, place] = (
            np.abs(np.sqrt(power) + np.sqrt(0.5) * (rng.standard_normal() + 1j * rng.standard_normal())) ** 2
        )
        spectra.append((10 * np.log10(draws)).astype(np.float32))
    stacked = stack.stack(spectra)
    assert int(stacked[24].contrast_db[0].argmax()) == 50
    assert stacked[24].contrast_db[0, 50] > 14.0
    newest_first = np.concatenate(spectra)
    assert stack.drift_at(newest_first, 50) == pytest.approx(drift, abs=0.05)
    fit = fit_line(newest_first, stack.margin + 50, drift, stack.drift_error(24), -2.5)
    assert fit.position_bins == pytest.approx(stack.margin + 50 + drift, abs=1.0)
    assert fit.drift_bins == pytest.approx(drift, abs=0.05)
    plain = np.mean(newest_first, axis=0)
    assert plain.max() - np.median(plain) < 10.0


def test_the_residual_is_the_frequency_of_the_block_sums() -> None:
    blocks = np.exp(2j * np.pi * -3.3 * HOP_S * np.arange(43))
    assert residual_hz(blocks, HOP_S, 6.0) == pytest.approx(-3.3, abs=0.02)


def test_a_message_tone_is_not_taken_for_the_pilot() -> None:
    offsets_hz = np.arange(-85, 86) * 5.86
    level_db = np.zeros(171, np.float32)

    def place(line_hz: float) -> int:
        return int(np.argmin(np.abs(offsets_hz - line_hz)))

    def chosen(side: int, lines: dict[float, float], kind: Follow = Follow.PILOT) -> float:
        levels = level_db.copy()
        for line_hz, height_db in lines.items():
            levels[place(line_hz)] = height_db
        choice = LineChoice(kind, (300.0, 2700.0), [side])
        return float(offsets_hz[choice.choose(0, offsets_hz, levels, levels, 8.0)])

    near = 3.0  # half a bin
    assert chosen(1, {-150.0: 12.0, 200.0: 32.0}) == pytest.approx(-150.0, abs=near)
    assert chosen(-1, {150.0: 12.0, -200.0: 32.0}) == pytest.approx(150.0, abs=near)
    assert chosen(0, {40.0: 12.0, 400.0: 32.0}) == pytest.approx(40.0, abs=near)
    assert chosen(1, {5.0: 20.0, -200.0: 18.0}) == pytest.approx(5.0, abs=near)
    assert chosen(0, {40.0: 12.0, 400.0: 32.0}, Follow.CARRIER) == pytest.approx(400.0, abs=near)


def test_the_message_band_passes_the_message_about_its_carrier_and_stops_noise() -> None:
    n = 12 * 4 * HOP
    t = np.arange(n) / RATE_HZ
    for carrier_hz, known in ((0.0, False), (400.0, True)):
        band = MessageBand(1, RATE_HZ, HOP, 4, 2700.0, 500.0)
        band.retune(np.array([carrier_hz]), np.array([known]))
        for tone_hz, gain in ((2700.0, 1.0), (-2700.0, 1.0), (0.0, 1.0), (4500.0, 0.0), (-4500.0, 0.0)):
            tone = np.exp(2j * np.pi * (carrier_hz + tone_hz) * t)[None].astype(np.complex64)
            out = np.concatenate(
                [band.filter(tone[:, k : k + band.length]) for k in range(0, n - band.length, 4 * HOP)], axis=1
            )
            # The first output is for the sample one hop after the start of the stretch.
            expected = gain * tone[0, HOP : HOP + out.shape[1]]
            assert np.abs(out[0] - expected).max() < 3e-3, (carrier_hz, tone_hz)  # 50 dB


def test_powers_have_their_line_at_multiples_of_the_carrier() -> None:
    t = np.arange(6000) / RATE_HZ
    rng = np.random.default_rng(7)
    message, other = rng.standard_normal((2, 6000))
    carrier = np.exp(2j * np.pi * (30.0 * t + 0.1))
    square = line_signal((message * carrier).astype(np.complex64), 2)
    assert np.mean(square * carrier.conj() ** 2) == pytest.approx(np.mean(message**2), rel=1e-4)
    sparse = np.where(rng.random(6000) < 0.5, message, 0.0) + 1j * np.where(rng.random(6000) < 0.5, other, 0.0)
    fourth = line_signal((sparse * carrier).astype(np.complex64), 4)
    line = np.mean(fourth * carrier.conj() ** 4)
    assert line.real > 0.2 * np.mean(np.abs(sparse) ** 2)
    assert np.isfinite(line_signal(np.zeros((1, 8), np.complex64), 4)).all()


def test_noise_of_the_square_gives_back_the_noise() -> None:
    """Density of ``2 m n + n^2`` at the line by trial (S. O. Rice 1945), turned back into that of ``n``."""
    rng = np.random.default_rng(8)
    n, channels = 2**16, 24
    for density in (1e-5, 1e-3):
        draws = rng.standard_normal((2, channels, n)) * np.sqrt(density * RATE_HZ / 2)
        square = line_signal((1.0 + draws[0] + 1j * draws[1]).astype(np.complex64), 2) - 1.0
        spectrum = np.abs(np.fft.fft(square * hann(n), axis=1)) ** 2 / (np.sum(hann(n) ** 2) * RATE_HZ)
        line_density = float(np.mean(spectrum[:, np.r_[4:60, n - 60 : n - 4]]))
        read = signal_noise_density(np.array([line_density]), np.array([1.0]), 2, RATE_HZ)[0]
        assert read == pytest.approx(density, rel=0.08)


def test_the_motion_watch_reads_frequency_and_tells_fading_from_drift() -> None:
    rng = np.random.default_rng(9)
    channels, quanta = 24, 400
    t = HOP_S * np.arange(4 * quanta)
    shape = np.exp(-((2 * np.pi * 4.0 * (np.arange(-60, 61) * HOP_S)) ** 2))  # 8 Hz of spread, two standard deviations
    white = rng.standard_normal((2, channels, len(t) + 120))
    faded = np.array([np.convolve(row, shape, "valid") for row in white[0] + 1j * white[1]])
    drifting = np.exp(2j * np.pi * (0.2 * t + 0.5 * 0.05 * t**2))[None].repeat(channels, axis=0)
    for line, is_fast in ((faded, True), (drifting, False)):
        watch = MotionWatch(channels, 24, 4, HOP_S, fast_fading=True)
        for k in range(0, len(t), 4):
            watch.watch(line[:, k : k + 4], np.full(channels, 1e-6), np.ones(channels, np.bool_))
        assert np.mean(watch.fast) == pytest.approx(float(is_fast), abs=0.1)
    assert watch.lag_hz == pytest.approx(0.2 + 0.05 * (t[-1] - 0.3), abs=0.01)


def test_the_designed_low_pass_stops_as_much_as_its_window_allows() -> None:
    band = MessageBand(1, RATE_HZ, HOP, 4, 2700.0, 500.0)
    frequencies_hz, response = freqz(band.close_taps, worN=4096, fs=RATE_HZ)
    passed = np.abs(response[frequencies_hz < 2700.0])
    stopped = np.abs(response[frequencies_hz > 2700.0 + 60.0 + 2 * 1.93 * RATE_HZ / 129])
    assert np.abs(passed - 1.0).max() < 2e-3
    assert 20 * np.log10(stopped.max()) < -58.0  # Kaiser window, beta 6: J. F. Kaiser 1974
