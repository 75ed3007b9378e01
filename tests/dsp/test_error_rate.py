"""Error rates from where samples lie: against tables, closed forms and plain simulation."""

import itertools
import math

import numpy as np
import pytest

from dsp.error_rate import Decisions, Modulated, spread_given
from dsp.mixture import Spread, spread, tail_reach

TWO, FOUR, EIGHT = (np.arange(1.0 - n, n, 2.0) for n in (2, 4, 8))


def even(levels):
    return np.full(levels.size, 1.0 / levels.size)


def decisions(levels, sigma, bits, taps=(0.0,)):
    reach = spread(np.asarray(taps), levels, even(levels), sigma)
    return Decisions(levels[None], ((reach,) * levels.size,), bits)


def rate(found):
    return found.error_rate(found.midpoints())


@pytest.mark.parametrize(
    ("q", "value"),
    [(3.0, 1.349898e-3), (4.0, 3.167124e-5), (5.0, 2.866516e-7), (6.0, 9.865876e-10), (7.0, 1.279813e-12)],
)
def test_two_levels_follow_the_table_of_q(q, value):
    """Tail of the normal law: M. Abramowitz and I. Stegun, Handbook of Mathematical Functions, table 26.1 (from memory)."""
    assert rate(decisions(TWO, 1.0 / q, 1)) == pytest.approx(value, rel=2e-5)


@pytest.mark.parametrize(
    ("levels", "bits", "per_bit_db", "value"),
    [
        (FOUR, 2, 8.0, 9.247214e-3),
        (FOUR, 2, 12.0, 1.386587e-4),
        (EIGHT, 3, 8.0, 5.233386e-2),
        (EIGHT, 3, 12.0, 9.723985e-3),
    ],
)
def test_gray_levels_follow_the_exact_rate_of_square_qam(levels, bits, per_bit_db, value):
    """K. Cho and D. Yoon, IEEE Trans. Commun. 50(7), 1074-1080, 2002; 16QAM and 64QAM at these Eb/N0 (citation from memory)."""
    energy = float(np.mean(levels**2))
    sigma = math.sqrt(energy / (2 * bits * 10 ** (per_bit_db / 10)))
    assert rate(decisions(levels, sigma, bits)) == pytest.approx(value, rel=1e-4)


@pytest.mark.parametrize("scale", [0.05, 0.2])
def test_proakis_channels_are_summed_over_all_their_patterns(scale):
    """Channel A of J. G. Proakis, Digital Communications, 4th ed., fig. 10.2-5 (from memory), weakened; by enumeration."""
    channel = scale * np.asarray([0.04, -0.05, 0.07, -0.21, -0.5, 0.36, 0.0, 0.21, 0.03, 0.07])
    patterns = np.asarray(list(itertools.product((-1.0, 1.0), repeat=channel.size)))
    sigma = 0.25
    exact = np.mean([0.5 * math.erfc((1.0 + shift) / sigma / math.sqrt(2)) for shift in patterns @ channel])
    assert rate(decisions(TWO, sigma, 1, channel)) == pytest.approx(exact, rel=0.02)


def test_noise_that_the_data_set_counts_where_it_is_large():
    """Against the mean over every pattern of the normal tail with that pattern's own variance (derived here)."""
    taps = np.asarray([0.1, 1.0, -0.05])
    slopes = np.asarray([0.9, 0.0, -0.9])
    jitter, additive = 0.12, 0.15
    exact = 0.0
    for before, after in itertools.product(TWO, TWO):
        sigma = math.hypot(additive, jitter * (slopes[0] * before + slopes[2] * after))
        exact += 0.25 * 0.5 * math.erfc((1.0 + taps[0] * before + taps[2] * after) / sigma / math.sqrt(2))
    reach = spread_given(1.0, 1, taps, additive**2, (Modulated(jitter**2, slopes),), TWO, even(TWO))
    assert reach.below(-1.0) == pytest.approx(exact, rel=0.03)
    alike = spread(np.asarray([0.1, -0.05]), TWO, even(TWO), math.sqrt(additive**2 + 2 * (0.9 * jitter) ** 2))
    assert alike.below(-1.0) < 0.6 * exact


@pytest.mark.parametrize("levels", [TWO, FOUR])
def test_the_spread_keeps_mean_and_variance(levels):
    rng = np.random.default_rng(5)
    taps, slopes = rng.normal(0.0, 0.08, 12), rng.normal(0.0, 0.5, 12)
    taps[4] = 1.0
    reach = spread_given(levels[-1], 4, taps, 0.01, (Modulated(0.002, slopes),), levels, even(levels))
    energy = float(np.mean(levels**2))
    others = np.delete(taps, 4)
    noise = 0.01 + 0.002 * ((slopes[4] * levels[-1]) ** 2 + energy * float(np.sum(np.delete(slopes, 4) ** 2)))
    assert reach.share.sum() == pytest.approx(1.0)
    assert float(reach.share @ reach.at) == pytest.approx(0.0, abs=1e-6)
    found = float(reach.share @ (reach.at**2 + np.square(reach.sigma)))
    assert found == pytest.approx(noise + energy * float(others @ others), rel=0.01)


def test_the_best_threshold_between_unequal_levels_is_where_their_tails_cross():
    """Two normal laws of unequal width: a quadratic equation for the point where their densities are equal."""
    narrow, wide = (Spread(np.zeros(1), np.ones(1), sigma) for sigma in (0.1, 0.2))
    found = Decisions(TWO[None], ((wide, narrow),), 1)
    best = float(found.best_thresholds()[0, 0])
    roots = np.roots([1 / 0.2**2 - 1 / 0.1**2, 2 / 0.2**2 + 2 / 0.1**2, 1 / 0.2**2 - 1 / 0.1**2 + 2 * math.log(2.0)])
    assert best == pytest.approx(min(roots, key=abs), abs=1e-3)
    assert found.error_rate(np.asarray([[best]])) < rate(found)


def test_the_curve_over_a_threshold_goes_through_the_middle_rate():
    found = decisions(FOUR, 0.3, 2)
    curve = found.over_threshold(0, 1)
    middle = curve.at.size // 2
    assert curve.at[0] == pytest.approx(-1.0)
    assert curve.at[-1] == pytest.approx(1.0)
    assert curve.ber[middle] == pytest.approx(rate(found), rel=1e-9)
    assert np.all(np.diff(curve.ber[: middle + 1]) < 0)
    assert np.all(np.diff(curve.ber[middle:]) > 0)


@pytest.mark.parametrize(("taps", "sigma"), [((0.2, 0.1, 0.05), 0.1), ((0.0,), 0.2), ((0.3, -0.1), 0.02)])
def test_the_saddlepoint_is_near_the_exact_tail(taps, sigma):
    exact = -spread(np.asarray(taps), TWO, even(TWO), sigma).quantile(1e-3)
    near = tail_reach(np.asarray(taps)[None], TWO, even(TWO), np.asarray([sigma]), 1e-3)
    assert near[0] == pytest.approx(exact, rel=0.02)
