"""The eye's sums against the waves they are made of, by explicit loops."""

import numpy as np
import pytest

from dsp.eye import COLUMNS, EARLIEST, HALO, LAGS, LATEST, RUN, EyeMeter, EyeSums, LineSums, rows_for
from dsp.link import SCHEMES, find_scheme
from dsp.pulses import raised_cosine
from dsp.tracking import Track, tables_for
from tests.dsp.streams import link_of, run, send

SPS = 4.0
ROLLOFF = 0.5


def line(decided, noise=0.0, seed=9):
    """Raised-cosine wave of ``decided`` symbols at 4 samples each, symbol 0 at sample 40; shape (samples,)."""
    t = (np.arange(int(decided.size * SPS) + 80) - 40) / SPS
    wave = np.zeros(t.size)
    for k, value in enumerate(decided):
        near = np.abs(t - k) < 12
        wave[near] += value * raised_cosine(t[near] - k, ROLLOFF)
    return wave + noise * np.random.default_rng(seed).standard_normal(t.size)


def tracks(scheme, symbols, gain, zero, sizes):
    """Tracks of so many symbols each over the same wave, as a loop without jitter would leave them."""
    levels = np.asarray(scheme.rail_levels)
    rails = [line(levels[symbols[r]], 0.02, 9 + r) for r in range(scheme.rails)]
    samples = tuple((zero + gain * rail).astype(np.float32) for rail in rails)
    total = symbols.shape[1]
    first = 0
    for size in sizes:
        n = min(size, total - first)
        k = np.arange(first, first + n + 1)
        instants = 40 + k * SPS
        decided, classes = np.zeros((2, n), np.float32), np.zeros((2, n), np.int8)
        values = np.zeros((2, n), np.float32)
        for rail in range(scheme.rails):
            classes[rail] = symbols[rail, first : first + n]
            decided[rail] = levels[classes[rail]]
            values[rail] = (samples[rail][(40 + k[:-1] * SPS).astype(int)] - zero) / gain
        phases = 0.25 * np.arange(first, first + n + 1) * 0.0
        yield Track(instants, phases, values, decided, np.zeros_like(values), classes,
                    np.full(2, gain), np.full(2, zero), samples, 0)  # fmt: skip
        first += n


def metered(name, symbols, sizes, *, window=10_000, every=1, slab=64, gain=0.3, zero=0.0, phases=8):
    scheme = find_scheme(name)
    windows = []
    meter = EyeMeter(
        scheme, tables_for(SPS, 0.5 * (1 + ROLLOFF)), offset_ui=0.0, sps=SPS, phases=phases, slab=slab, window=window,
        every=every, finished=windows.append,
    )  # fmt: skip
    for track in tracks(scheme, symbols, gain, zero, sizes):
        meter.push(track, meter.resample(track))
    meter.end_segment()
    return meter, windows


def random_symbols(name, count, seed=1):
    scheme = find_scheme(name)
    return np.random.default_rng(seed).integers(0, scheme.levels, (scheme.rails, count))


@pytest.mark.parametrize("name", ["pam2", "pam4", "qpsk", "16qam"])
def test_the_normal_equations_are_those_of_symbols_and_wave(name):
    scheme = find_scheme(name)
    symbols = random_symbols(name, 600)
    sums = metered(name, symbols, [600])[0].sums
    assert sums.symbols == 600 - 2 * HALO
    levels = np.asarray(scheme.rail_levels)
    k = np.arange(HALO, 600 - HALO)
    lags = np.arange(EARLIEST, LATEST + 1)
    assert lags.size == LAGS
    columns = [levels[symbols[rail]][k[:, None] - lags] for rail in range(scheme.rails)]
    design = np.concatenate([*columns, np.ones((k.size, 1))], axis=1)
    np.testing.assert_allclose(sums.gram, design.T @ design, atol=1e-6)
    for rail in range(scheme.rails):
        wave = line(levels[symbols[rail]], 0.02, 9 + rail)
        # phases 0, 2, 4, 6 of 8 fall on samples at 4 a symbol
        for phase in (0, 2, 4, 6):
            at = wave[40 + (k * SPS).astype(int) + phase // 2]
            np.testing.assert_allclose(
                sums.cross[rail][:, phase], design.T @ at, atol=0.02 * np.sqrt(k.size) * levels[-1]
            )
            assert sums.square[rail][phase] == pytest.approx(at @ at, rel=5e-3)


@pytest.mark.parametrize("name", ["pam2", "pam3", "pam4", "qpsk"])
def test_level_sums_are_those_at_the_decision_instants(name):
    scheme = find_scheme(name)
    symbols = random_symbols(name, 500)
    sums = metered(name, symbols, [500])[0].sums
    for rail in range(scheme.rails):
        here = symbols[rail, HALO : 500 - HALO]
        wave = line(np.asarray(scheme.rail_levels)[symbols[rail]], 0.02, 9 + rail)
        at = wave[40 + (np.arange(HALO, 500 - HALO) * SPS).astype(int)]
        for power in range(3):
            expected = np.bincount(here, at**power, scheme.levels)
            np.testing.assert_allclose(sums.level_sums[rail, :, power], expected, atol=0.5)
        np.testing.assert_array_equal(sums.level_sums[rail, :, 0], np.bincount(here, minlength=scheme.levels))


@pytest.mark.parametrize("name", ["pam2", "pam3", "pam4", "16qam"])
def test_each_level_s_histogram_holds_its_own_traces_on_either_side(name):
    """At column 64 the level's own value; half a symbol before and after, what the neighbours make of it."""
    scheme = find_scheme(name)
    symbols = random_symbols(name, 700)
    sums = metered(name, symbols, [700])[0].sums
    levels = np.asarray(scheme.rail_levels)
    k = np.arange(HALO, 700 - HALO)
    centres = sums.rows.centres()
    histogram = sums.histogram()
    np.testing.assert_array_equal(np.concatenate([sums.density()] * 2, axis=1), histogram.sum(axis=1))
    for rail in range(scheme.rails):
        wave = line(levels[symbols[rail]], 0.02, 9 + rail)
        for column, shift in ((COLUMNS, 0.0), (COLUMNS + 32, 0.5), (COLUMNS - 32, -0.5)):
            # what comes before a symbol is drawn from the interval that begins at the symbol before
            drawn = k if shift >= 0 else k + 1
            at = wave[40 + ((drawn + shift) * SPS).astype(int)]
            here = symbols[rail][drawn]
            for level in range(scheme.levels):
                counts = histogram[rail, level, column]
                assert counts.sum() == np.sum(here == level)
                mean = counts @ centres / counts.sum()
                assert mean == pytest.approx(at[here == level].mean(), abs=0.6 * sums.rows.height)
                spread = np.sqrt(counts @ centres**2 / counts.sum() - mean**2)
                assert spread == pytest.approx(at[here == level].std(), abs=0.02)


def same_counts(one, other):
    assert one.symbols == other.symbols
    assert one.drawn == other.drawn
    np.testing.assert_array_equal(one.gram, other.gram)  # whole numbers
    np.testing.assert_array_equal(one.crossing_bins, other.crossing_bins)
    np.testing.assert_array_equal(one.level_sums[..., 0], other.level_sums[..., 0])
    assert np.abs(one.left.astype(int) - other.left.astype(int)).sum() == 0


@pytest.mark.parametrize(
    "sizes", [[1] * 900, [37] * 30, [400, 1, 1, 600], [899, 1]], ids=["ones", "37", "mixed", "tail"]
)
@pytest.mark.parametrize("every", [1, 3])
def test_tracks_may_come_in_any_lengths(sizes, every):
    symbols = random_symbols("qpsk", 900)
    same_counts(
        metered("qpsk", symbols, sizes, every=every)[0].sums, metered("qpsk", symbols, [900], every=every)[0].sums
    )


@pytest.mark.parametrize("name", ["pam2", "pam4"])
@pytest.mark.parametrize("every", [1, 4])
def test_windows_are_full_and_add_up_to_the_whole(name, every):
    symbols = random_symbols(name, 1000)
    whole = metered(name, symbols, [1000], every=every)[0].sums
    meter, windows = metered(name, symbols, [171] * 6, window=150, every=every)
    assert [sums.symbols for sums in windows] == [150] * 6
    total = EyeSums(find_scheme(name), 8)
    for sums in (*windows, meter.sums):
        total.merge(sums)
    same_counts(total, whole)
    if whole.right is not None:
        np.testing.assert_array_equal(total.right, whole.right)
    np.testing.assert_allclose(total.cross, whole.cross, atol=0.01)
    np.testing.assert_allclose(total.crossing_groups, whole.crossing_groups, atol=1e-6)
    assert whole.drawn == np.sum(np.arange(whole.symbols) // RUN % every == 0)
    assert whole.left.sum() == COLUMNS * whole.drawn


def test_a_break_keeps_what_had_its_neighbours_and_mixes_nothing_across():
    symbols = random_symbols("pam2", 400)
    scheme = find_scheme("pam2")
    meter = metered("pam2", symbols, [400])[0]
    for track in tracks(scheme, symbols, 0.3, 0.0, [400]):
        meter.push(track, meter.resample(track))
    meter.end_segment()
    once = metered("pam2", symbols, [400])[0].sums
    assert meter.sums.symbols == 2 * once.symbols
    np.testing.assert_array_equal(meter.sums.gram, 2 * once.gram)
    np.testing.assert_array_equal(meter.sums.left, 2 * once.left)
    assert len(meter.sums.clock.sums) == 2


@pytest.mark.parametrize("count", [0, 1, 2 * HALO, 2 * HALO + 1])
def test_a_run_without_neighbours_sums_nothing(count):
    sums = metered("pam2", random_symbols("pam2", max(count, 1)), [count] if count else [])[0].sums
    assert sums.symbols == max(count - 2 * HALO, 0)
    assert sums.left.sum() == COLUMNS * sums.symbols


def test_the_unit_and_the_middle_are_taken_out():
    symbols = random_symbols("pam4", 500)
    one = metered("pam4", symbols, [500], gain=0.3)[0].sums
    other = metered("pam4", symbols, [500], gain=2e-6, zero=5e-6)[0].sums
    np.testing.assert_allclose(other.cross, one.cross, atol=0.05)
    assert other.unit_sums[0, 0] / other.unit_sums[2, 0] == pytest.approx(2e-6)
    assert other.unit_sums[1, 0] / other.unit_sums[2, 0] == pytest.approx(5e-6)


@pytest.mark.parametrize("scheme", SCHEMES.values(), ids=list(SCHEMES))
def test_rows_hold_every_level_with_room_for_overshoot_and_read_back(scheme):
    rows = rows_for(scheme)
    assert rows.count >= 512  # the least that a raster must have
    reach = max(scheme.rail_levels)
    assert rows.centres()[0] < -1.5 * reach
    assert rows.centres()[-1] > 1.5 * reach
    assert np.allclose(np.floor(rows.centres() * rows.scale + rows.zero), np.arange(rows.count))
    assert np.diff(rows.centres()) == pytest.approx(rows.height)


def test_a_line_through_segments_of_their_own_intercepts():
    """Against numpy's least squares with one column an intercept."""
    rng = np.random.default_rng(2)
    sums, k_all, d_all, segment = LineSums(), [], [], []
    for s, (count, start) in enumerate([(500, 0), (300, 0), (2, 0), (800, 100_000)]):
        k = start + np.arange(count, dtype=float)
        d = 3e-4 * k + 0.37 * s + 0.01 * rng.standard_normal(count)
        for part_k, part_d in zip(np.array_split(k, 3), np.array_split(d, 3), strict=True):
            if part_k.size:
                sums.add(s, part_k, part_d)
        k_all.append(k)
        d_all.append(d)
        segment += [s] * count
    k, d = np.concatenate(k_all), np.concatenate(d_all)
    design = np.column_stack([k, *(np.asarray(segment) == s for s in range(4))]).astype(float)
    solution, residual, _, _ = np.linalg.lstsq(design, d, rcond=None)
    slope, mean, rms = sums.line()
    assert slope == pytest.approx(solution[0], rel=1e-6)
    assert mean == pytest.approx(d.mean())
    assert rms == pytest.approx(np.sqrt(residual[0] / d.size), rel=1e-4)
    halves = LineSums()
    halves.merge(sums)
    assert halves.line() == sums.line()
    halves.merge(sums)  # the same points once more: the same line through twice as many
    assert halves.line() == pytest.approx(sums.line())
    assert halves.sums[0][0] == 2 * sums.sums[0][0]


def test_a_line_needs_three_points_that_differ():
    sums = LineSums()
    assert sums.line() is None
    sums.add(0, np.array([5.0, 6.0]), np.array([1.0, 2.0]))
    assert sums.line() is None
    sums.add(1, np.array([7.0]), np.array([3.0]))
    assert sums.line()[0] == pytest.approx(1.0)


@pytest.mark.parametrize("sps", [8.5, 10.0, 15.9])
def test_square_pulses_on_a_carrier_are_met_at_any_rate_that_their_corners_ask_for(sps):
    chain = run(link_of("qpsk", sps, "rect"), send("qpsk", sps, pulse="rect", symbols=3000, snr_db=30.0).samples)
    assert chain.total.symbols > 2900
