"""The compiled raster, resampling and sums against brute force. Values are incommensurate with every bin."""

import numpy as np
import pytest
from scipy.optimize import brentq

from dsp._kernels import raster as kernel
from dsp._kernels.lanes import SPAN
from dsp.interpolation import expander, spread_weights, weights

ROWS, SCALE, ZERO = 256, 61.803398875, 128.271828


def tones(t):
    """A band-limited wave, at most 0.19 cycles a unit of ``t``."""
    t = np.asarray(t, dtype=float)
    return np.sin(2 * np.pi * 0.0871 * t + 0.3) + 0.7 * np.cos(2 * np.pi * 0.1893 * t) + 0.2


# -- resampling ---------------------------------------------------------------------------------------------------------


def test_resample_real_reads_a_band_limited_wave_at_drifting_instants():
    x = tones(np.arange(600)).astype(np.float32)
    instants = 20.0 + np.cumsum(4.0 + 0.3 * np.sin(np.arange(101) / 7))
    wave = np.full((8, 103), np.nan, np.float32)[:, :100].copy()
    kernel.resample_real(x, weights(0.25), instants, 0.37, 1.7, 0.2, wave)
    steps = np.diff(instants)
    for p in range(8):
        expected = (tones(instants[:-1] + 0.37 + p / 8 * steps) - 0.2) * 1.7
        np.testing.assert_allclose(wave[p], expected, atol=1.7 * 4e-3)
    # and the error's power is below -50 dB of the signal's, as the interpolator promises
    error = wave[0] - (tones(instants[:-1] + 0.37) - 0.2) * 1.7
    assert np.mean(error**2) < 1e-5 * 1.7**2 * np.mean((tones(np.arange(600)) - 0.2) ** 2)


@pytest.mark.parametrize("stagger", [0.0, 2.1])
def test_resample_turned_takes_the_carrier_out_at_each_point(stagger):
    n = np.arange(600)
    turn = 0.0123  # cycles a sample
    i, q = tones(n), tones(1.37 * n / 1.4 + 5)
    z = (i + 1j * q) * np.exp(2j * np.pi * (turn * n + 0.11))
    instants = 20.0 + 4.2 * np.arange(101)
    cycles = turn * instants + 0.11
    step = 2 * np.pi * np.diff(cycles) / 8
    angle = 2 * np.pi * cycles[:-1]
    wave_i, wave_q = np.empty((8, 100), np.float32), np.empty((8, 100), np.float32)
    rails = [np.ascontiguousarray(part, dtype=np.float32) for part in (z.real, z.imag)]
    trig = [f.astype(np.float32) for f in (np.cos(angle), np.sin(angle), np.cos(step), np.sin(step))]
    kernel.resample_turned(
        *rails, weights(0.25), instants, 0.0, stagger, *trig, 2.0, 0.5, 0.1, -0.2, True, wave_i, wave_q
    )
    for p in range(8):
        at = instants[:-1] + p / 8 * 4.2
        np.testing.assert_allclose(wave_i[p], (tones(at) - 0.1) * 2.0, atol=2.0 * 6e-3)
        late = at + stagger
        np.testing.assert_allclose(wave_q[p], (tones(1.37 * late / 1.4 + 5) + 0.2) * 0.5, atol=0.5 * 6e-3)


@pytest.mark.parametrize("turned", [False, True])
@pytest.mark.parametrize("count", [0, 5, 600])
@pytest.mark.parametrize("sps", [4.0, 5.37, 7.99])
def test_resample_eight_puts_eight_even_points_into_each_symbol(turned, count, sps):
    instants = 20.0 + np.cumsum(np.full(count + 1, sps) + 0.01 * np.sin(np.arange(count + 1)))
    n = np.arange(int(instants[-1]) + 30)
    turn = 0.0123 if turned else 0.0
    z = (tones(n) + 1j * tones(1.37 * n / 1.4 + 5)) * np.exp(2j * np.pi * (turn * n + 0.11 * turned))
    rails = [np.ascontiguousarray(part, dtype=np.float32) for part in (z.real, z.imag)]
    cycles = turn * instants + 0.11 * turned
    wave_i, wave_q = np.full((8, count), np.nan, np.float32), np.full((8, count), np.nan, np.float32)
    weigh = spread_weights(0.25, sps / 8, 8, SPAN)
    shift = 0.3 * sps
    kernel.resample_eight(*rails, weigh, instants, shift, cycles, 0.3, turned, 2.0, 0.5, 0.1, -0.2, wave_i, wave_q)
    for p in range(8):
        at = instants[:-1] + shift + p / 8 * sps
        np.testing.assert_allclose(wave_i[p], (tones(at) - 0.1) * 2.0, atol=2.0 * 6e-3)
        if turned:
            np.testing.assert_allclose(wave_q[p], (tones(1.37 * at / 1.4 + 5) + 0.2) * 0.5, atol=0.5 * 6e-3)


# -- the class raster ---------------------------------------------------------------------------------------------------


def pieces(first, count):
    starts = np.arange(0, count, 512)
    return np.stack((first + starts, np.minimum(512, count - starts)), axis=1)


def expected_positions(wave, first, count, expand):
    """Row position of every point, shape (columns, count), by explicit sums in float64."""
    n_phases, factor = wave.shape[0], expand.shape[0]
    line = wave.T.reshape(-1).astype(float)  # the wave in order of time
    rows = []
    for q in range(n_phases):
        for s in range(factor):
            at = np.arange(first, first + count) * n_phases + q
            value = sum(float(expand[s, m]) * line[at + m - 2] for m in range(6))
            rows.append(value * SCALE + ZERO)
    return np.array(rows)


@pytest.mark.parametrize(("n_phases", "factor"), [(8, 8), (64, 1)])
@pytest.mark.parametrize("pairs", [False, True])
def test_fill_is_the_two_dimensional_histogram_of_the_drawn_traces(n_phases, factor, pairs):
    first, count, classes = 5, 5301, 4  # more than two tiles, more than a slab
    rng = np.random.default_rng(n_phases)
    wave = rng.uniform(-1.6, 1.6, (n_phases, first + count + 5)).astype(np.float32)
    wave[0, 40], wave[0, 43] = 50.0, -50.0  # beyond either end of the raster
    expand = expander(factor, 0.19)
    symbols = rng.integers(0, classes, wave.shape[1]).astype(np.int8)
    label, other = symbols[first : first + count], symbols[first + 1 : first + 1 + count]
    label = label.astype(int) * classes + other if pairs else label
    left = np.zeros((n_phases * factor, classes * (classes if pairs else 1) * ROWS), np.uint32)
    right = np.zeros_like(left)
    kernel.fill(wave, pieces(first, count), symbols, classes, pairs, expand, ROWS, SCALE, ZERO, left, right)
    position = np.clip(expected_positions(wave, first, count, expand), 0.25, ROWS - 0.75)
    # float32 sums may fall on the other side of a row's edge only within this distance of it
    clear = np.abs(position - np.round(position)) > 2e-3
    assert clear.mean() > 0.99
    column = np.broadcast_to(np.arange(position.shape[0])[:, None], position.shape)
    edges = (np.arange(position.shape[0] + 1) - 0.5, np.arange(left.shape[1] + 1))
    for counts, kind in ((left, label), (right, other)):
        if counts is right and pairs:
            assert not right.any()
            continue
        flat = position + kind.astype(float) * ROWS
        sure = np.histogram2d(column[clear], flat[clear], bins=edges)[0]
        doubtful = np.histogram2d(column[~clear], flat[~clear] + 2e-3, bins=edges)[0]
        doubtful += np.histogram2d(column[~clear], flat[~clear] - 2e-3, bins=edges)[0]
        assert counts.sum() == position.size
        assert np.all(counts >= sure)
        assert np.all(counts <= sure + doubtful)


# -- crossings ----------------------------------------------------------------------------------------------------------


def curve(t):
    """In symbols: alternations with slow beats, so that crossings come anywhere in the interval, sometimes thrice."""
    return np.sin(np.pi * t * 0.973 + 0.4) + 0.6 * np.sin(np.pi * 0.41 * t) + 0.5 * np.sin(np.pi * 2.57 * t + 1.0)


def test_crossings_are_those_that_a_root_finder_sees():
    n_phases, n, first, count = 64, 420, 10, 400
    wave = curve(np.arange(n)[None, :] + np.arange(n_phases)[:, None] / n_phases).astype(np.float32)
    classes = (wave[0] > 0).astype(np.int8)
    around = np.array([-2, -1, 2], np.int32)
    bins, groups, edges = np.zeros(500, np.int64), np.zeros((8, 3)), np.zeros((2, 2))
    found = kernel.crossings(wave, pieces(first, count), classes, around, 2, 0.5, bins, groups, edges)
    times, group, rising, several = [], [], [], 0
    for k in range(first, first + count):
        if classes[k] == classes[k + 1]:
            continue
        grid = k + np.arange(n_phases + 1) / n_phases
        signs = curve(grid) > 0
        changes = np.flatnonzero(signs[1:] != signs[:-1])
        several += changes.size > 1
        roots = [brentq(curve, grid[i], grid[i + 1]) - k for i in (changes[0], changes[-1])]
        times.append(np.mean(roots))
        group.append(4 * classes[k - 2] + 2 * classes[k - 1] + classes[k + 2])
        rising.append(classes[k + 1] > classes[k])
    times, group, rising = np.array(times), np.array(group), np.array(rising, int)
    assert found == times.size == bins.sum()
    assert several > 0
    about = times - 0.5
    for column, power in enumerate((about**0, about, about**2)):
        np.testing.assert_allclose(groups[:, column], np.bincount(group, power, 8), atol=times.size * 2e-5)
    np.testing.assert_allclose(edges[:, 0], np.bincount(rising, minlength=2))
    np.testing.assert_allclose(edges[:, 1], np.bincount(rising, times, 2), atol=times.size * 2e-5)
    spread = np.histogram(times, bins=500, range=(0, 1))[0]
    assert np.abs(np.cumsum(bins) - np.cumsum(spread)).max() <= 2  # at most a crossing or two on a bin's edge


def test_crossings_of_several_levels_are_those_between_mirror_images():
    wave = np.zeros((8, 12), np.float32)
    classes = np.array([0, 3, 1, 2, 0, 2, 3, 0, 1, 1, 2, 2], np.int8)
    levels = np.array([-3.0, -1.0, 1.0, 3.0])[classes]
    for k in range(11):
        wave[:, k] = levels[k] + (levels[k + 1] - levels[k]) * np.arange(8) / 8
    wave[:, 11] = levels[11]
    bins, groups, edges = np.zeros(64, np.int64), np.zeros((4, 3)), np.zeros((2, 2))
    found = kernel.crossings(wave, pieces(1, 9), classes, np.array([0], np.int32), 4, 0.5, bins, groups, edges)
    # from symbol 1 on: 1-2 and 3-0 are mirror images: symbols 2 (1 to 2), 6 (3 to 0) and 9 (1 to 2)
    assert found == 3
    np.testing.assert_array_equal(groups[:, 0], [0, 2, 0, 1])
    np.testing.assert_array_equal(edges[:, 0], [1, 2])


# -- sums ---------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("same", [True, False])
def test_add_gram_is_every_lagged_product(same):
    rng = np.random.default_rng(3)
    a = rng.choice(np.array([-3, -1, 1, 3], np.float32), 900)
    b = a if same else rng.choice(np.array([-3, -1, 1, 3], np.float32), 900)
    first, last, earliest, n_lags = 40, 871, -8, 21
    gram = np.ones((n_lags, n_lags))
    kernel.add_gram(a, b, first, last, earliest, n_lags, same, gram)
    lags = np.arange(earliest, earliest + n_lags)
    k = np.arange(first, last)
    design_a, design_b = a[k[:, None] - lags].astype(float), b[k[:, None] - lags].astype(float)
    np.testing.assert_array_equal(gram - 1, design_a.T @ design_b)  # whole numbers: exact


def test_add_cross_and_its_companions_are_every_lagged_product():
    rng = np.random.default_rng(6)
    levels = rng.choice(np.array([-3, -1, 1, 3], np.float32), 2900)
    wave = rng.standard_normal((8, 2900)).astype(np.float32)
    first, last, earliest, n_lags = 40, 2871, -8, 21
    k, lags = np.arange(first, last), np.arange(earliest, earliest + n_lags)
    design, part = levels[k[:, None] - lags].astype(float), wave[:, k].astype(float)
    cross = np.ones((n_lags, 8))
    kernel.add_cross(wave, levels, first, last, earliest, n_lags, cross)
    np.testing.assert_allclose(cross - 1, design.T @ part.T, atol=1e-2)
    sums, squares = np.ones(8), np.ones(8)
    kernel.add_means(wave, first, last, sums, squares)
    np.testing.assert_allclose(sums - 1, part.sum(axis=1), atol=2e-3)
    np.testing.assert_allclose(squares - 1, np.sum(part**2, axis=1), rtol=1e-5)
    shifted = np.ones(n_lags)
    kernel.add_lagged(levels, first, last, earliest, shifted)
    np.testing.assert_array_equal(shifted - 1, design.sum(axis=0))


def test_quantiles_are_where_the_cumulative_counts_reach_their_share():
    counts = np.zeros((3, 64), np.int64)
    counts[0, 10:60] = 100  # even: linear within a row
    counts[1, 30] = 1000  # a single row: its middle
    places = np.empty((3, 3))
    kernel.quantiles(counts, np.array([0.04, 0.5, 0.96]), places)
    np.testing.assert_allclose(places[:, 0], [12.0, 35.0, 58.0], atol=1e-9)
    np.testing.assert_allclose(places[:, 1], [30.5, 30.5, 30.5], atol=1e-9)
    assert np.isnan(places[:, 2]).all()


def test_add_levels_counts_and_sums_each_class():
    rng = np.random.default_rng(4)
    values, classes = rng.standard_normal(777).astype(np.float32), rng.integers(0, 4, 777).astype(np.int8)
    sums = np.ones((4, 3))
    kernel.add_levels(values, classes, sums)
    for column in range(3):
        expected = 1 + np.bincount(classes, values.astype(float) ** column, 4)
        np.testing.assert_allclose(sums[:, column], expected, rtol=1e-12)
