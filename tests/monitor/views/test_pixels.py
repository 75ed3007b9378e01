from dataclasses import replace

import numpy as np
import pytest

from monitor.views.pixels import (
    Span,
    between_columns,
    density_indices,
    finite_runs,
    level_profiles,
    open_span,
    opening_floor,
    shares_per_pixel,
    tick_step,
    value_at,
    visible_levels,
)
from tests.monitor.views.synthetic_eyes import make_eye

UI = np.linspace(-1.0, 1.0, 129)


@pytest.fixture(scope="module")
def eye():
    return make_eye(2, noise=0.05, symbols=400)[0]


def one_trace(column, row, count=1):
    image = make_eye(2, symbols=50)[0]
    density = np.zeros_like(image.density)
    density[0, column, row] = count
    return replace(image, density=density)


@pytest.mark.parametrize("height", [1, 37, 200, 512, 1999])
def test_no_trace_is_lost_between_rows_and_pixels(eye, height):
    step = eye.row_level[1] - eye.row_level[0]
    low, high = eye.row_level[0] - step / 2, eye.row_level[-1] + step / 2
    shares = shares_per_pixel(eye.density[0], eye.row_level, low, high, height)
    np.testing.assert_allclose(shares.sum(axis=-1), eye.density[0].sum(axis=-1), rtol=1e-12)


def test_rows_that_match_pixels_are_copied_as_they_are(eye):
    step = eye.row_level[1] - eye.row_level[0]
    low, high = eye.row_level[0] - step / 2, eye.row_level[-1] + step / 2
    shares = shares_per_pixel(eye.density[0], eye.row_level, low, high, eye.row_level.size)
    np.testing.assert_allclose(shares, eye.density[0], atol=1e-9)


def test_pixels_beyond_the_rows_are_empty(eye):
    shares = shares_per_pixel(eye.density[0], eye.row_level, -20.0, 20.0, 400)
    centres = -20.0 + 0.1 * (np.arange(400) + 0.5)
    assert not shares[:, np.abs(centres) > 4.1].any()
    np.testing.assert_allclose(shares.sum(axis=-1), eye.density[0].sum(axis=-1), rtol=1e-12)


def test_a_hit_is_drawn_at_its_time_and_amplitude_with_high_amplitudes_on_top():
    image = one_trace(column=96, row=320)
    indices = density_indices(image, 0, -2.0, 2.0, 514, 400, 256)
    lit = np.argwhere(indices > 0)
    y, x = lit.mean(axis=0)
    assert x == pytest.approx(514 * (0.5 + 1.0) / 2.0, abs=1.5)
    amplitude = image.row_level[320]
    assert y + 0.5 == pytest.approx(400 * (2.0 - amplitude) / 4.0, abs=1.0)
    assert amplitude > 0
    assert y < 200


@pytest.mark.parametrize("crowd", [100, 10_000, 500_000])
def test_a_single_trace_shows_beside_a_crowd(crowd):
    image = one_trace(column=64, row=256, count=crowd)
    image.density[0, :, 300] = crowd
    image.density[0, 20, 200] = 1
    indices = density_indices(image, 0, -4.0, 4.0, 516, 512, 256)
    alone = indices[511 - 200, 76:90].max()
    assert alone >= 256 * 0.12
    assert indices[511 - 300, 80] >= 250
    assert density_indices(one_trace(0, 0, 0), 0, -4.0, 4.0, 129, 512, 256).max() == 0


def test_more_traces_never_look_fewer():
    image = one_trace(64, 256, 0)
    counts = np.unique(np.geomspace(1, 1e5, 129).astype(np.uint32))
    image.density[0, : counts.size, 256] = counts
    row = density_indices(image, 0, -4.0, 4.0, 129, 512, 256)[511 - 256, : counts.size]
    assert (np.diff(row.astype(int)) >= 0).all()
    assert np.unique(row).size > 60


def path(rows, columns, row_of_column):
    tone = np.zeros((rows, columns), dtype=np.float32)
    tone[row_of_column, np.arange(columns)] = 1.0
    return tone


@pytest.mark.parametrize("step", [-6, 1, 6])
def test_a_lone_steep_trace_stays_one_line_between_columns(step):
    position = np.linspace(0.0, 15.0, 151)
    column = np.arange(16)
    drawn = between_columns(path(200, 16, 100 + step * column), position, 10)
    expected = 100 + step * position
    assert drawn.max(axis=0).min() >= 0.5 - 1e-5
    off_path = np.abs(np.arange(200)[:, None] - expected) >= 1.0
    assert drawn[off_path].max() < 1e-5
    np.testing.assert_allclose(drawn.sum(axis=0), 1.0, atol=1e-4)


def test_a_level_trace_and_a_crowd_are_drawn_straight_between_columns():
    rng = np.random.default_rng(3)
    tone = rng.uniform(0.2, 1.0, (30, 8)).astype(np.float32)
    position = np.linspace(0.0, 7.0, 71)
    drawn = between_columns(tone, position, 5)
    expected = [np.interp(position, np.arange(8), row) for row in tone]
    np.testing.assert_allclose(drawn, expected, atol=1e-5)


def test_a_trace_that_goes_nowhere_fades_and_joins_nothing_out_of_reach():
    tone = np.zeros((100, 2), dtype=np.float32)
    tone[10, 0] = tone[80, 1] = 1.0
    drawn = between_columns(tone, np.linspace(0.0, 1.0, 11), 20)
    np.testing.assert_allclose(drawn[10], np.linspace(1.0, 0.0, 11), atol=1e-6)
    np.testing.assert_allclose(drawn[80], np.linspace(0.0, 1.0, 11), atol=1e-6)
    assert np.count_nonzero(drawn.sum(axis=1)) == 2


def test_fewer_pixels_than_columns_are_drawn_straight_too():
    tone = path(40, 9, np.arange(9) * 4)
    drawn = between_columns(tone, np.array([0.0, 2.5, 8.0]), 10)
    np.testing.assert_allclose(drawn[:, 0], tone[:, 0])
    np.testing.assert_allclose(drawn[:, 1], (tone[:, 2] + tone[:, 3]) / 2)
    np.testing.assert_allclose(drawn[:, 2], tone[:, 8])


def test_the_amplitude_axis_holds_all_traces_in_whole_half_units(eye):
    low, high = visible_levels(eye)
    held = np.flatnonzero(eye.density.sum(axis=(0, 1)))
    assert low <= eye.row_level[held[0]]
    assert high >= eye.row_level[held[-1]]
    assert (2 * low).is_integer()
    assert (2 * high).is_integer()
    assert high - low < 6.0


def test_the_amplitude_axis_of_an_empty_eye_still_shows_its_levels():
    assert visible_levels(one_trace(0, 0, 0)) == (-2.0, 2.0)


def test_distributions_stand_at_their_levels_and_the_tallest_is_full():
    image = make_eye(4, noise=0.1, symbols=4000)[0]
    profiles = level_profiles(image, 0, -5.0, 5.0, 400)
    assert profiles.max() == 1.0
    bins = profiles.shape[1]
    centres = 5.0 - 10.0 * (np.arange(bins) + 0.5) / bins
    np.testing.assert_allclose(profiles @ centres / profiles.sum(axis=1), image.levels, atol=0.05)


def test_few_traces_give_wider_bins_and_none_give_flat_ones():
    few = level_profiles(make_eye(2, noise=0.3, symbols=60)[0], 0, -4.0, 4.0, 400)
    many = level_profiles(make_eye(2, noise=0.02, symbols=8000)[0], 0, -4.0, 4.0, 400)
    assert few.shape[1] < many.shape[1] == 400
    image = make_eye(2, symbols=10)[0]
    empty = level_profiles(replace(image, distributions=np.zeros_like(image.distributions)), 0, -4.0, 4.0, 400)
    assert not empty.any()


def triangle(slope, best=0.0, top=60.0):
    return top - slope * np.abs(UI - best)


def test_the_width_of_a_triangle_is_where_it_meets_zero():
    span = open_span(UI, triangle(200.0), 0.0)
    assert span == Span(pytest.approx(-0.3), pytest.approx(0.3))


def test_the_width_is_one_ui_at_most():
    span = open_span(UI, np.full(UI.size, 100.0), 0.1)
    assert span == Span(pytest.approx(-0.4), pytest.approx(0.6))


def test_a_closed_or_unknown_eye_has_no_width():
    assert open_span(UI, triangle(200.0, top=-5.0), 0.0) is None
    assert open_span(UI, triangle(200.0), None) is None
    assert open_span(UI, triangle(200.0), float("nan")) is None
    assert open_span(UI, np.full(UI.size, np.nan), 0.0) is None


def test_the_width_ends_where_the_curve_is_unknown():
    curve = triangle(200.0)
    curve[UI > 0.1] = np.nan
    span = open_span(UI, curve, 0.0)
    assert span is not None
    assert span.start_ui == pytest.approx(-0.3)
    assert span.stop_ui == UI[UI <= 0.1][-1]


def test_the_curve_is_read_between_columns_and_not_across_gaps():
    curve = triangle(200.0)
    assert value_at(UI, curve, 0.123) == pytest.approx(60 - 24.6)
    curve[70] = np.nan
    assert value_at(UI, curve, (UI[69] + UI[70]) / 2) is None
    assert value_at(UI, curve, 1.5) is None


@pytest.mark.parametrize(("best", "floor"), [(70.0, -50.0), (0.0, -50.0), (-44.0, -100.0), (-160.0, -200.0)])
def test_the_opening_axis_reaches_below_a_closed_eye(best, floor):
    assert opening_floor(triangle(300.0, top=best)) == floor
    assert floor < best
    assert opening_floor(np.full(5, np.nan)) == -50.0


def test_runs_skip_what_is_not_finite():
    values = np.array([np.nan, 1.0, 2.0, np.inf, 3.0])
    assert finite_runs(values) == [slice(1, 3), slice(4, 5)]
    assert finite_runs(np.array([np.nan])) == []
    assert finite_runs(np.array([1.0])) == [slice(0, 1)]


def test_tick_steps_are_1_2_or_5():
    assert tick_step(150.0, 3) == 50.0
    assert tick_step(150.0, 4) == 50.0
    assert tick_step(0.9, 10) == pytest.approx(0.1)
    assert tick_step(7.0, 2) == 5.0
