"""The residual taken apart: each part against what the transmitter did, and the sums against plain ones."""

import numpy as np
import pytest

from dsp.figures import Figures
from dsp.link import find_scheme
from dsp.pulses import raised_cosine
from dsp.residual import FRAME, ResidualSums, Tone, find_tone, pairs, pattern_means, products_of
from tests.dsp.streams import link_of, run, send


def split_of(scheme, symbols=20_000, *, sps=4.0, pulse="rrc:0.35", tone=None, **defects):
    """The split, and the gain that makes a level unit."""
    sent = send(scheme, sps, pulse, symbols, **defects)
    samples = sent.samples
    if tone is not None:
        amplitude, frequency = tone
        turn = 2 * np.pi * frequency / sps * np.arange(samples.size)
        wave = np.exp(1j * turn) if np.iscomplexobj(samples) else np.cos(turn)
        samples = (samples + amplitude * sent.gain * wave).astype(samples.dtype)
    chain = run(link_of(scheme, sps, pulse), samples)
    return Figures(chain.total, chain.context())._split


@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "16qam"])
def test_noise_alone_has_no_jitter_in_it(scheme):
    split = split_of(scheme, snr_db=24.0)
    energy = find_scheme(scheme).symbol_energy()
    assert split.random.mean() * split.random.size == pytest.approx(energy / 10**2.4, rel=0.06)
    assert np.all(split.timing <= 0.03 * split.random)
    assert np.all(split.phase <= 0.03 * split.random)
    assert split.tone is None


@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "16qam"])
def test_jitter_of_each_symbol_by_itself_is_told_from_noise(scheme):
    rms = 0.04 if scheme != "16qam" else 0.02
    split = split_of(scheme, snr_db=30.0, jitter_rms_ui=rms)
    assert split.common + split.single == pytest.approx(rms**2, rel=0.12)
    assert split.single > 5 * split.common


@pytest.mark.parametrize("scheme", ["pam2", "qpsk"])
def test_jitter_that_neighbours_share_is_told_from_noise(scheme):
    # too slow for neighbours to differ, too fast for the loop (BnT 0.005) to follow or to peak much
    split = split_of(scheme, snr_db=26.0, jitter_sine_ui=0.08, jitter_sine_hz=220.0)
    assert split.common == pytest.approx(0.08**2 / 2, rel=0.25)
    assert split.single < 0.15 * split.common


def test_moving_edges_of_a_rectangular_pulse_are_timing_jitter():
    still = split_of("pam2", sps=16.0, pulse="rect", snr_db=20.0)
    moved = split_of("pam2", sps=16.0, pulse="rect", snr_db=20.0, jitter_rms_ui=0.05)
    assert still.timing[0] < 0.05 * still.random[0]
    assert moved.timing[0] == pytest.approx(moved.random[0] - still.random[0], rel=0.2)


@pytest.mark.parametrize("scheme", ["qpsk", "16qam", "oqpsk"])
def test_phase_jitter_is_told_from_noise(scheme):
    without, split = (split_of(scheme, snr_db=28.0, phase_noise_deg=step) for step in (0.0, 0.5))
    grown = split.random - without.random
    assert split.phase == pytest.approx(grown, rel=0.15)
    assert np.all(split.timing < 0.05 * split.random)


def test_timing_and_phase_jitter_are_told_from_each_other():
    split = split_of("qpsk", snr_db=25.0, jitter_rms_ui=0.04, phase_noise_deg=0.5)
    alone = split_of("qpsk", snr_db=25.0, jitter_rms_ui=0.04)
    assert split.timing == pytest.approx(alone.timing, rel=0.2)
    assert split.phase == pytest.approx(split.random - alone.random, rel=0.2)


@pytest.mark.parametrize(("scheme", "frequency"), [("pam2", 0.0113), ("16qam", 0.2), ("16qam", -0.31)])
def test_a_tone_is_found_with_its_frequency_and_power(scheme, frequency):
    tone = split_of(scheme, snr_db=25.0, tone=(0.15, frequency)).tone
    assert tone.frequency == pytest.approx(frequency, abs=0.2 / FRAME)
    power = 0.15**2 if scheme == "16qam" else 0.15**2 / 2
    assert tone.variance == pytest.approx(power, rel=0.12)


def test_a_tone_above_half_the_symbol_rate_shows_at_its_alias():
    # 0.9 of the symbol rate would not pass the filter; 0.6 does in part, and is seen at 1 - 0.6
    tone = split_of("pam2", snr_db=30.0, tone=(0.3, 0.58)).tone
    assert tone.frequency == pytest.approx(0.42, abs=0.3 / FRAME)


def test_noise_seldom_shows_a_tone():
    rng = np.random.default_rng(4)
    found = sum(
        find_tone(rng.gamma(frames, 1.0, FRAME), frames, real=False) is not None
        for frames in (2, 8, 40)
        for _ in range(100)
    )
    assert found <= 3


def test_a_tone_needs_two_frames():
    assert find_tone(np.ones(FRAME), 1, real=False) is None


def test_a_line_under_the_window_keeps_its_power():
    frequency = 100.37 / FRAME
    line = 0.3 * np.exp(2j * np.pi * frequency * np.arange(8 * FRAME)).reshape(8, FRAME)
    rng = np.random.default_rng(1)
    noise = 0.1 * (rng.standard_normal(line.shape) + 1j * rng.standard_normal(line.shape))
    power = np.sum(np.abs(np.fft.fft((line + noise) * np.hanning(FRAME + 1)[:-1], axis=1)) ** 2, axis=0)
    tone = find_tone(power, 8, real=False)
    assert isinstance(tone, Tone)
    assert tone.variance == pytest.approx(0.09, rel=0.03)
    assert tone.frequency == pytest.approx(frequency, abs=0.1 / FRAME)


def test_products_are_those_of_numpy():
    rng = np.random.default_rng(2)
    errors, late, early, others = rng.standard_normal((4, 2, 1300)).astype(np.float32)
    for row, (a, b, lag) in zip(products_of(errors, late, early, others), pairs(2), strict=True):
        to, on = slice(0, 1300 - lag), slice(lag, 1300)
        r = errors[a, to] * errors[b, on]
        x = 0.5 * (late[a, to] * late[b, on] + early[a, to] * early[b, on])
        y = others[a, to] * others[b, on]
        wanted = [r.size, *(v.sum() for v in (x, y, x * x, x * y, y * y, r, r * x, r * y, r * r))]
        np.testing.assert_allclose(row, wanted, rtol=1e-4, atol=2e-2)


def test_patterns_that_differ_by_chance_have_no_means():
    rng = np.random.default_rng(3)
    group = rng.integers(0, 32, 20_000)
    for shift, wanted in ((0.0, 0.0), (0.2, 0.04)):
        # the product of two symbols: no linear response explains it
        error = rng.standard_normal(group.size) + shift * np.where(group % 4 % 3 == 0, 1.0, -1.0)
        table = np.stack((np.bincount(group, minlength=32), np.bincount(group, error, 32)), axis=1)[None]
        means, variance = pattern_means(table, np.asarray([float(error @ error)]), 2)
        assert variance[0] == pytest.approx(wanted, rel=0.2)
        assert means.any() == (shift > 0)


def test_what_is_linear_in_the_symbols_is_the_response_s_and_not_the_patterns():
    rng = np.random.default_rng(3)
    group = rng.integers(0, 64, 20_000)
    symbols = np.asarray([-3.0, -1.0, 1.0, 3.0])
    error = rng.standard_normal(group.size) + 0.1 * symbols[group % 4] - 0.05 * symbols[group // 16] + 0.1
    table = np.stack((np.bincount(group, minlength=64), np.bincount(group, error, 64)), axis=1)[None]
    means, _ = pattern_means(table, np.asarray([float(error @ error)]), 4)
    assert not means.any()


@pytest.mark.parametrize("cuts", [[1, 2, 3], list(range(0, 24_000, 997))], ids=len)
def test_sums_do_not_depend_on_how_the_stream_was_cut(cuts):
    samples = send("qpsk", symbols=6000, snr_db=22.0).samples
    whole, cut = (run(link_of("qpsk"), samples, places).total.residual for places in ([], cuts))
    for name in ("products", "patterns", "square", "points", "power", "constellation"):
        np.testing.assert_array_equal(getattr(whole, name), getattr(cut, name))
    assert whole.frames == cut.frames > 0


def test_sums_of_two_stretches_are_those_of_both():
    scheme = find_scheme("16qam")
    one, other = ResidualSums(scheme), ResidualSums(scheme)
    one.products += 1.0
    other.products += 2.0
    other.frames = 3
    other.constellation[5, 7] = 4
    one.merge(other)
    assert one.frames == 3
    assert np.all(one.products == 3.0)
    assert one.constellation[5, 7] == 4


def test_the_constellation_counts_every_symbol_where_it_stands():
    sums = run(link_of("qpsk"), send("qpsk", symbols=4000, snr_db=35.0).samples).total
    counts = sums.residual.constellation
    assert counts.sum() == pytest.approx(sums.symbols, abs=500)  # the first few wait for the response
    centre = counts.shape[0] / 2
    one = centre * (1 + 1 / sums.residual.reach)
    near = counts[round(one) - 6 : round(one) + 6, round(one) - 6 : round(one) + 6].sum()
    assert near == pytest.approx(counts.sum() / 4, rel=0.1)


def test_too_few_symbols_are_not_split():
    assert split_of("qpsk", symbols=1500, snr_db=20.0) is None


def test_where_no_pattern_was_seen_there_are_no_means():
    means, variance = pattern_means(np.zeros((2, 4, 2)), np.zeros(2), 2)
    assert not means.any()
    assert not variance.any()


@pytest.mark.parametrize("idle", [(1.0, -1.0), (1.0, 1.0, -1.0, -1.0), (1.0, 1.0, 1.0, -1.0)], ids=str)
def test_a_link_that_falls_into_a_repeating_pattern_is_still_read(idle):
    rng = np.random.default_rng(11)
    data = np.where(rng.integers(0, 2, 4000) > 0, 1.0, -1.0)
    symbols = np.concatenate((data, np.resize(idle, 40_000)))
    impulses = np.zeros(4 * symbols.size)
    impulses[::4] = symbols
    wave = np.convolve(impulses, raised_cosine(np.arange(-32, 33) / 4, 0.5), mode="same")
    samples = (0.3 * wave + 0.01 * rng.standard_normal(wave.size)).astype(np.float32)
    chain = run(link_of("pam2", 4.0, "rc:0.5"), samples)
    reading = Figures(chain.total, chain.context()).reading()
    assert reading.opening_pct > 50.0
    assert reading.budget is not None
    assert all(np.isfinite(part) for part in (reading.budget.noise_pct, reading.budget.timing_pct))
